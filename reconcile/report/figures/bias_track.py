"""Bias of one meter through time, with its cumulative sums and the interval of its onset."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ...diagnose.track import DECISION
from ..canvas import Canvas, Scale, ticks
from ..numbers import plain, signed
from .axes import frame, label_course, place_of, thinned
from .sheet import Figure

__all__ = ["bias_track", "bias_tracks"]

if TYPE_CHECKING:
    from ...over_time.tracks import Drift
    from ...results import Result

Array = npt.NDArray[np.float64]

HEIGHT, MIDDLE = 330.0, 206.0


def bias_track(
    name: str,
    unit: str,
    labels: Sequence[str],
    bias: Array,
    sigma: Array,
    up: Array,
    down: Array,
    limit: float,
    onsets: Sequence[tuple[int, int, int]] = (),
) -> Figure:
    """Draw the bias of each snapshot with ±2 sigmas, below it the cumulative sums with their alarm line.

    Parameters
    ----------
    name, unit : str
        Of the meter or fault.
    labels : sequence of str, length N
    bias, sigma : ndarray, shape (N,)
        In `unit`; nan where it is not known.
    up, down : ndarray, shape (N,)
        One-sided cumulative sums in sigmas, both positive.
    limit : float
        Where they alarm.
    onsets : sequence of (int, int, int), optional
        Of each change the most likely first snapshot, and the ends of its interval.

    Returns
    -------
    Figure
    """
    course = place_of(labels)
    c = Canvas(course.width, HEIGHT)
    top, floor = 40.0, 176.0
    spread = np.concatenate([bias - 2 * sigma, bias + 2 * sigma, [0.0]])
    low, high = float(np.nanmin(spread)), float(np.nanmax(spread))
    y = Scale(low - 0.05 * (high - low), high + 0.05 * (high - low), floor, top)
    c.text((course.left, 18), f"Bias, {unit}", "ink", 12, bold=True)
    for v in ticks(y.low, y.high, 4):
        c.line((course.left, y(v)), (course.right, y(v)), "ink" if abs(v) < 1e-12 else "hair")
        c.text((course.left - 8, y(v) + 4), f"{v:g}", "soft", 12, "end")
    sums = np.concatenate([up[np.isfinite(up)], down[np.isfinite(down)], [limit]])
    z = Scale(0.0, 1.1 * float(sums.max()), HEIGHT - 34, MIDDLE + 16)
    for k, (most_likely, earliest, latest) in enumerate(onsets, 1):
        a, b = course.x[earliest], course.x[latest]
        c.box(a, top - 8, max(b - a, 3.0), HEIGHT - 34 - top + 8, "glow")
        at = course.x[most_likely]
        c.line((at, top - 8), (at, HEIGHT - 34), "mark", 1.5, "2 3")
        c.text((at, top - 14), "onset" if len(onsets) == 1 else str(k), "mark", 12, "middle", bold=True)
    spots = thinned(bias, course)
    for i in spots:
        c.line((course.x[i], y(bias[i] - 2 * sigma[i])), (course.x[i], y(bias[i] + 2 * sigma[i])), "line", 1)
        c.dot((course.x[i], y(bias[i])), 3.0 if len(spots) < 120 else 1.8, "main")
    c.text((course.left, MIDDLE), "Cumulative sums, in sigmas (solid: high, dashed: low)", "ink", 12, bold=True)
    frame(c, course, MIDDLE, HEIGHT - 34)
    c.line((course.left, z(limit)), (course.right, z(limit)), "mark", 1.5, "6 4")
    c.text((course.left - 8, z(limit) + 4), "alarm", "mark", 12, "end")
    if z(0) - z(limit) > 14:
        c.text((course.left - 8, z(0) + 4), "0", "soft", 12, "end")
    for values, dash in ((up, None), (down, "5 3")):
        c.polyline([(course.x[i], z(values[i])) for i in thinned(values, course)], "ink", 1.8, dash)
    label_course(c, course, HEIGHT - 34)
    alarm = np.flatnonzero((up > limit) | (down > limit))
    told = f"the cumulative sum alarms first at {labels[int(alarm[0])]}" if alarm.size else "no alarm"
    began = "".join(
        f"; {'it most likely began' if k == 0 else 'it changed again'} at {labels[o]}, between {labels[e]} and {labels[la]}"
        for k, (o, e, la) in enumerate(onsets)
    )
    description = f"Bias of {name} in {unit} over {len(labels)} snapshots: {told}{began}."
    rows = [
        (labels[i], signed(bias[i], sigma[i]), plain(sigma[i], sigma[i]), plain(up[i], 0.1), plain(down[i], 0.1))
        for i in spots
    ]
    header = ("snapshot", f"bias, {unit}", "± sigma", "sum high", "sum low")
    slug = "".join(ch if ch.isalnum() else "-" for ch in name)
    return Figure(f"bias-{slug}", f"Bias of {name}", description, c, header, rows)


def bias_tracks(result: Result) -> list[Figure]:
    """Draw the changes that were found over all snapshots, the clearest first.

    Parameters
    ----------
    result : Result

    Returns
    -------
    list of Figure
    """
    found: dict[str, list[Drift]] = {}
    for drift in result.history.drifts:
        found.setdefault(drift.track.name, []).append(drift)
    drawn = []
    for drifts in found.values():
        track = drifts[0].track
        onsets = sorted((d.stretch.onset, d.stretch.earliest, d.stretch.latest) for d in drifts)
        drawn.append(
            bias_track(
                track.name, track.unit, result.labels, track.sizes, track.sigmas, track.up, track.down, DECISION, onsets
            )
        )  # fmt: skip
    return drawn
