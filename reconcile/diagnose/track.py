"""Track of a fault over snapshots in order: when it began, and whether it grows.

The evidence for a fault in snapshot s is its score ``z_s = f_s't_s`` with information ``w_s = |f_s|^2``: without a fault
``z_s ~ N(0, w_s)``, with one of size b ``z_s ~ N(w_s b, w_s)``. A snapshot that does not check the fault has w = 0 and says
nothing. One-sided cumulative sums raise the alarm (Page 1954, Biometrika 41, 100); the onset is found by likelihood
over all places where a step or a ramp could have begun (Hinkley 1970, Biometrika 57, 1). Leading axes are free, so
that many tracks are worked out at once. Both citations from memory.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import chdtri

from .refusal import Refusal

__all__ = ["ALLOWANCE", "CLEAR", "DECISION", "STEP_DROP", "Change", "Shape", "change", "cusum", "first_alarm"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

ALLOWANCE = 0.5
"""Drift of the cumulative sum per snapshot, in standard deviations: tuned to a step of one (common practice)."""

DECISION = 5.0
"""Height at which the cumulative sum alarms: about 930 snapshots between false alarms on one side (common practice)."""

CLEAR = float(chdtri(1, 0.05))
"""Difference of twice the log likelihood, 3.84, from which one shape of a change is preferred to another."""

STEP_DROP = float(-2.0 * np.log1p(-np.sqrt(0.95)))
"""The same for the onset of a step, 7.35: its likelihood is no smooth function of the onset, so 3.84 covers too little.

The law of the maximum of two independent exponentials holds for small steps and errs to the safe side for large ones
(Hansen 2000, Econometrica 68, 575; from memory).
"""


@dataclass(frozen=True)
class Shape:
    """Best step or ramp.

    Attributes
    ----------
    gain : ndarray, shape (...,)
        What it takes off the sum of squares: twice the gain in log likelihood.
    onset : ndarray of int, shape (...,)
        First snapshot that it moves, counted from 0.
    earliest, latest : ndarray of int, shape (...,)
        Ends of the 95 % set of onsets: gains within 3.84 of the best for a ramp, 7.35 for a step.
        Growth that has just begun makes the set of a ramp cover a little less: 92 to 95 % in simulations.
    size, sigma : ndarray, shape (...,)
        Size of a step; growth per snapshot of a ramp; in the unit of the fault.
    """

    gain: Array
    onset: Ints
    earliest: Ints
    latest: Ints
    size: Array
    sigma: Array


@dataclass(frozen=True)
class Change:
    """A change of a track.

    Attributes
    ----------
    step, ramp : Shape
    limit : float
        Gain that chance would exceed with at most the level asked for, over all onsets and both shapes.
    """

    step: Shape
    ramp: Shape
    limit: float

    @property
    def gain(self) -> Array:
        """Larger of the two gains."""
        return np.maximum(self.step.gain, self.ramp.gain)

    @property
    def favours_ramp(self) -> Array:
        """Twice the log likelihood of the ramp above that of the step; within `CLEAR` of zero neither is preferred."""
        return self.ramp.gain - self.step.gain


def cusum(scores: Array, information: Array, side: int, *, allowance: float = ALLOWANCE) -> Array:
    """One-sided cumulative sum of the standardised scores.

    Parameters
    ----------
    scores, information : ndarray, shape (..., N)
    side : int
        +1 for a fault that grows upwards, -1 downwards.
    allowance : float

    Returns
    -------
    ndarray, shape (..., N)
        Never below zero; stands still where nothing checks the fault.
    """
    if side not in (-1, 1):
        raise Refusal("side-not-a-sign", f"a side is +1 or -1, not {side}")
    checked = information > 0
    z = np.divide(side * scores, np.sqrt(information), out=np.zeros_like(scores, dtype=float), where=checked)
    sums = np.cumsum(np.where(checked, z - allowance, 0.0), axis=-1)
    lowest = np.minimum(np.minimum.accumulate(sums, axis=-1), 0.0)
    return np.asarray(sums - lowest)


def first_alarm(sums: Array, *, decision: float = DECISION) -> Ints:
    """First snapshot at which a cumulative sum exceeds the decision height, shape (...,); -1 where none does."""
    above = sums > decision
    return np.where(above.any(axis=-1), above.argmax(axis=-1), -1).astype(np.int64)


def change(scores: Array, information: Array, *, level: float = 0.05, tracks: int = 1) -> Change:
    """Best step and best ramp of a track, with the sets of onsets that are not excluded.

    Parameters
    ----------
    scores, information : ndarray, shape (..., N)
        Of one stretch without a calibration inside.
    level : float
        Of `Change.limit`, within (0, 1).
    tracks : int
        Number of tracks that are looked at together, for the same limit.

    Returns
    -------
    Change

    Raises
    ------
    Refusal
        If the stretch is empty or the level is out of range.
    """
    z, w = np.asarray(scores, dtype=float), np.asarray(information, dtype=float)
    n = z.shape[-1]
    if n == 0:
        raise Refusal("no-snapshots", "a track needs at least one snapshot")
    if not 0 < level < 1:
        raise Refusal("level-out-of-range", f"a test level lies within 0 and 1, not {level}")
    # Sums over what comes after: a ramp that begins at s weighs snapshot u by u - s + 1.
    after_z, after_w = _after(z), _after(w)
    linear_w = _after(after_w)
    step = _shape(after_z, after_w, STEP_DROP)
    ramp = _shape(_after(after_z), 2.0 * _after(linear_w) - linear_w, CLEAR)
    # Bonferroni over onsets, shapes and tracks: gains of neighbouring onsets are correlated, so the true level is lower.
    return Change(step, ramp, float(chdtri(1, level / (2 * n * max(tracks, 1)))))


def _after(values: Array) -> Array:
    """Sum of each entry and all behind it."""
    return np.asarray(np.cumsum(values[..., ::-1], axis=-1)[..., ::-1])


def _shape(score: Array, information: Array, drop: float) -> Shape:
    known = information > 0
    safe = np.where(known, information, 1.0)
    gains = np.where(known, score**2 / safe, 0.0)
    best = gains.argmax(axis=-1)
    top = np.take_along_axis(gains, best[..., None], axis=-1)
    likely = gains >= top - drop
    n = gains.shape[-1]
    at = np.take_along_axis(safe, best[..., None], axis=-1)[..., 0]
    any_known = known.any(axis=-1)
    return Shape(
        gain=top[..., 0],
        onset=best.astype(np.int64),
        earliest=likely.argmax(axis=-1).astype(np.int64),
        latest=(n - 1 - likely[..., ::-1].argmax(axis=-1)).astype(np.int64),
        size=np.where(any_known, np.take_along_axis(score, best[..., None], axis=-1)[..., 0] / at, np.nan),
        sigma=np.where(any_known, 1.0 / np.sqrt(at), np.nan),
    )
