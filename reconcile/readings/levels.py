"""From the level of a tank to what it holds, with the uncertainty."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Problem

__all__ = ["LevelTable", "inventory", "inventory_change"]


@dataclass(frozen=True)
class LevelTable:
    """What a tank holds at a level: one number per unit of level, or a calibration table.

    Attributes
    ----------
    per_level : float, optional
        Content per unit of level (area, or kg per %), for straight walls.
    levels, contents : (m,) sequences of float, optional
        Calibration table, both rising.
    """

    per_level: float | None = None
    levels: Sequence[float] = ()
    contents: Sequence[float] = ()

    def __post_init__(self) -> None:
        if (self.per_level is None) == (len(self.levels) == 0):
            raise InputError(
                Problem("level-rule", "a level needs either a content per unit of level or a table", "give one of them")
            )
        if self.per_level is not None:
            if not self.per_level > 0:
                raise InputError(
                    Problem("level-rule", f"content per level is {self.per_level}", "give a positive number")
                )
            return
        if len(self.levels) != len(self.contents) or len(self.levels) < 2:
            words = f"the table has {len(self.levels)} levels and {len(self.contents)} contents"
            raise InputError(Problem("level-table", words, "give two or more pairs"))
        for name, column in (("levels", self.levels), ("contents", self.contents)):
            falls = np.flatnonzero(np.diff(np.asarray(column, dtype=float)) <= 0)
            if falls.size:
                i = int(falls[0])
                words = (
                    f"the {name} of the table do not rise: {column[i]:g} is followed by {column[i + 1]:g} (row {i + 2})"
                )
                raise InputError(Problem("level-table", words, "correct the table"))


def _slopes(x: npt.NDArray[np.float64], y: npt.NDArray[np.float64]) -> npt.NDArray[np.float64]:
    """Slopes that keep the interpolation rising.

    Harmonic means of the neighbouring chords: Fritsch F.N., Butland J. (1984), SIAM J. Sci. Stat. Comput. 5(2),
    300-304; at the ends, one-sided, limited to three times the chord.
    """
    h, chord = np.diff(x), np.diff(y) / np.diff(x)
    if chord.size == 1:
        return np.array([chord[0], chord[0]])
    w1, w2 = 2 * h[1:] + h[:-1], h[1:] + 2 * h[:-1]
    inner = (w1 + w2) / (w1 / chord[:-1] + w2 / chord[1:])
    ends = []
    for h0, h1, c0, c1 in ((h[0], h[1], chord[0], chord[1]), (h[-1], h[-2], chord[-1], chord[-2])):
        ends.append(float(np.clip(((2 * h0 + h1) * c0 - h0 * c1) / (h0 + h1), 0.0, 3.0 * c0)))
    return np.concatenate([[ends[0]], inner, [ends[1]]])


def inventory(
    level: npt.ArrayLike, table: LevelTable, sigma: npt.ArrayLike = 0.0
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """Return what a tank holds at each level.

    Parameters
    ----------
    level : (N,) array_like
        NaN stays NaN.
    table : LevelTable
        Between the rows of a table the content follows a monotone cubic.
    sigma : float or (N,) array_like
        Standard uncertainty of the level.

    Returns
    -------
    content, sigma : (N,) float64
        The sigma is that of the level times the local content per level.

    Raises
    ------
    InputError
        ``level-outside``: a level beyond the table; nothing is extrapolated.
    """
    x = np.atleast_1d(np.asarray(level, dtype=np.float64))
    s = np.broadcast_to(np.asarray(sigma, dtype=np.float64), x.shape)
    if table.per_level is not None:
        return x * table.per_level, s * table.per_level
    knots, heights = np.asarray(table.levels, dtype=np.float64), np.asarray(table.contents, dtype=np.float64)
    outside = np.flatnonzero((x < knots[0]) | (x > knots[-1]))
    if outside.size:
        i = int(outside[0])
        words = f"level {x[i]:g} (row {i + 1}) is outside the table, {knots[0]:g} to {knots[-1]:g}"
        if outside.size > 1:
            words += f"; {outside.size} such rows in all"
        raise InputError(Problem("level-outside", words, "extend the table, or mark the reading as bad"))
    slope = _slopes(knots, heights)
    k = np.clip(np.searchsorted(knots, x, side="right") - 1, 0, knots.size - 2)
    h = knots[k + 1] - knots[k]
    t = (x - knots[k]) / h
    y0, y1, d0, d1 = heights[k], heights[k + 1], slope[k] * h, slope[k + 1] * h
    content = y0 + t * (d0 + t * ((3 * (y1 - y0) - 2 * d0 - d1) + t * (d0 + d1 - 2 * (y1 - y0))))
    local = (d0 + t * (2 * (3 * (y1 - y0) - 2 * d0 - d1) + 3 * t * (d0 + d1 - 2 * (y1 - y0)))) / h
    return content, s * np.abs(local)


def inventory_change(
    first: float, last: float, table: LevelTable, sigma: float, sigma_scale: float = 0.0
) -> tuple[float, float]:
    """Return (change, sigma) of the content between two levels.

    Parameters
    ----------
    first, last : float
    table : LevelTable
    sigma : float
        Standard uncertainty of one reading of the level, independent from one to the other.
    sigma_scale : float
        Relative standard uncertainty of the content per level (area, density); it acts on the change.
    """
    content, s = inventory([first, last], table, sigma)
    change = float(content[1] - content[0])
    return change, float(np.sqrt(np.sum(s**2) + (sigma_scale * change) ** 2))
