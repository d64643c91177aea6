"""A balance that does not close, against the flow: a constant loss, or an error that grows with the reading."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..canvas import Canvas, Scale, text_width, ticks
from ..numbers import plain, signed
from .sheet import Figure

__all__ = ["closure_against_flow", "error_against_flow"]

if TYPE_CHECKING:
    from ...results import Result

Array = npt.NDArray[np.float64]

WIDTH, HEIGHT = 760.0, 340.0
LEFT, RIGHT, TOP, BOTTOM = 76.0, 740.0, 66.0, 292.0


def closure_against_flow(
    name: str,
    flow: Array,
    closure: Array,
    spread: Array,
    models: Sequence[tuple[str, float, float, float, float]],
    *,
    flow_unit: str = "",
    unit: str = "",
    labels: Sequence[str] | None = None,
    quantity: str = "closure",
) -> Figure:
    """Draw the closure of a balance at several flows, and the lines of the models that compete.

    Parameters
    ----------
    name : str
        Of the balance.
    flow, closure, spread : ndarray, shape (N,)
        Flow through it, closure and its expected spread.
    models : sequence of (words, intercept, slope, left, limit)
        Straight lines, each with what it leaves of χ² and what it may leave; at most three.
    flow_unit, unit : str
        Units of flow and closure.
    labels : sequence of str, optional
        Names of the snapshots, for the table.
    quantity : str
        What `closure` is: the closure of a balance, or the error of a meter.

    Returns
    -------
    Figure
    """
    c = Canvas(WIDTH, HEIGHT)
    high = 1.08 * float(np.nanmax(flow))
    x = Scale(0.0, high, LEFT, RIGHT)
    ends = [v for _, a, b, _, _ in models for v in (a, a + b * high)]
    every = np.concatenate([closure - 2 * spread, closure + 2 * spread, ends, [0.0]])
    low, top = float(np.nanmin(every)), float(np.nanmax(every))
    y = Scale(low - 0.06 * (top - low), top + 0.06 * (top - low), BOTTOM, TOP)
    for v in ticks(0.0, high, 6):
        c.line((x(v), TOP), (x(v), BOTTOM), "hair")
        c.text((x(v), BOTTOM + 18), f"{v:g}", "soft", 12, "middle")
    for v in ticks(y.low, y.high, 5):
        c.line((LEFT, y(v)), (RIGHT, y(v)), "hair")
        c.text((LEFT - 8, y(v) + 4), f"{v:g}", "soft", 12, "end")
    c.line((LEFT, y(0.0)), (RIGHT, y(0.0)), "ink")
    c.text(((LEFT + RIGHT) / 2, HEIGHT - 8), f"flow, {flow_unit}" if flow_unit else "flow", "ink", 12, "middle")
    c.text((12, TOP - 12), f"{quantity}, {unit}" if unit else quantity, "ink", 12)
    styles = (("main", None), ("mark", "8 4"), ("ink", "2 4"))
    at = LEFT
    for (words, a, b, left, limit), (role, dash) in zip(models, styles, strict=False):
        c.line((x(0.0), y(a)), (x(high), y(a + b * high)), role, 2, dash)
        c.line((at, 18), (at + 28, 18), role, 2, dash)
        text = f"{words}: leaves χ² {left:.2f}, limit {limit:.2f}"
        c.text((at + 34, 22), text, "ink", 12)
        at += 52 + text_width(text, 12)
        if at > RIGHT - 200:
            at = LEFT
    for f, v, s in zip(flow, closure, spread, strict=True):
        if np.isfinite(f) and np.isfinite(v):
            c.line((x(f), y(v - 2 * s)), (x(f), y(v + 2 * s)), "line", 1.2)
            c.dot((x(f), y(v)), 4, "ink", hollow=True)
    told = "; ".join(
        f"{words} leaves χ² {left:.2f} ({'not excluded' if left <= limit else 'excluded'}, limit {limit:.2f})"
        for words, _, _, left, limit in models
    )
    description = f"{quantity.capitalize()} of {name} at {len(flow)} flows with ±2 spreads. {told}."
    names = labels if labels is not None else [str(i + 1) for i in range(len(flow))]
    rows = [(n, plain(f), signed(v, s), plain(s, s)) for n, f, v, s in zip(names, flow, closure, spread, strict=True)]
    header = ("snapshot", f"flow, {flow_unit}".rstrip(", "), f"{quantity}, {unit}".rstrip(", "), "± spread")
    return Figure(
        "closure-against-flow", f"{quantity.capitalize()} of {name} against flow", description, c, header, rows
    )


def error_against_flow(result: Result) -> Figure | None:
    """Draw the error of the meter that several flow levels speak of: constant, or in proportion.

    Parameters
    ----------
    result : Result

    Returns
    -------
    Figure or None
        None where nothing is wrong, or where all snapshots lie at one level.
    """
    levels = result.history.levels
    if levels.outcome == "nothing" or levels.one_level or levels.tag not in result.tags:
        return None
    track = next((t for t in result.history.tracks if t.name == levels.tag), None)
    if track is None:
        return None
    read = result.readings[:, result.tags.index(levels.tag)]
    flow = np.asarray(read - track.sizes, dtype=float)
    models = []
    for shape, words in (("constant", "a constant error"), ("scale", "an error of scale")):
        every = [m for c in levels.classes for m in c] + list(levels.rejected)
        m = next((m for m in every if m.shape == shape and levels.tag in m.names), None)
        if m is not None:
            intercept, slope = (m.size, 0.0) if shape == "constant" else (0.0, m.size)
            models.append((words, intercept, slope, m.left, m.limit))
    seen = np.isfinite(flow)
    return closure_against_flow(
        levels.tag,
        flow[seen],
        track.sizes[seen],
        track.sigmas[seen],
        models,
        flow_unit=levels.unit,
        unit=levels.unit,
        labels=[t for t, s in zip(result.labels, seen, strict=True) if s],
        quantity="error",
    )
