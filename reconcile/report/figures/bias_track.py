"""Bias of one meter through time, with its cumulative sums and the interval of its onset."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from ..canvas import Canvas, Scale, ticks
from ..numbers import plain, signed
from .axes import frame, label_course, place_of, thinned
from .sheet import Figure

__all__ = ["bias_track"]

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
    onset: tuple[int, int, int] | None = None,
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
    onset : (int, int, int), optional
        Most likely snapshot of the onset, and the ends of its interval.

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
    if onset is not None:
        a, b = course.x[onset[1]], course.x[onset[2]]
        c.box(a, top - 8, max(b - a, 3.0), HEIGHT - 34 - top + 8, "glow")
        c.line((course.x[onset[0]], top - 8), (course.x[onset[0]], HEIGHT - 34), "mark", 1.5, "2 3")
        anchor = "end" if course.x[onset[0]] > 0.7 * course.right else "start"
        side = -6 if anchor == "end" else 6
        c.text((course.x[onset[0]] + side, top - 14), "onset", "mark", 12, anchor, bold=True)
    spots = thinned(bias, course)
    for i in spots:
        c.line((course.x[i], y(bias[i] - 2 * sigma[i])), (course.x[i], y(bias[i] + 2 * sigma[i])), "line", 1)
        c.dot((course.x[i], y(bias[i])), 3.0 if len(spots) < 120 else 1.8, "main")
    c.text((course.left, MIDDLE), "Cumulative sums, in sigmas (solid: high, dashed: low)", "ink", 12, bold=True)
    frame(c, course, MIDDLE, HEIGHT - 34)
    c.line((course.left, z(limit)), (course.right, z(limit)), "mark", 1.5, "6 4")
    c.text((course.left - 8, z(limit) + 4), "alarm", "mark", 12, "end")
    c.text((course.left - 8, z(0) + 4), "0", "soft", 12, "end")
    for values, dash in ((up, None), (down, "5 3")):
        c.polyline([(course.x[i], z(values[i])) for i in thinned(values, course)], "ink", 1.8, dash)
    label_course(c, course, HEIGHT - 34)
    alarm = np.flatnonzero((up > limit) | (down > limit))
    told = f"the cumulative sum alarms first at {labels[int(alarm[0])]}" if alarm.size else "no alarm"
    began = (
        f"; it most likely began at {labels[onset[0]]}, between {labels[onset[1]]} and {labels[onset[2]]}"
        if onset is not None
        else ""
    )
    description = f"Bias of {name} in {unit} over {len(labels)} snapshots: {told}{began}."
    rows = [
        (labels[i], signed(bias[i], sigma[i]), plain(sigma[i], sigma[i]), plain(up[i], 0.1), plain(down[i], 0.1))
        for i in spots
    ]
    header = ("snapshot", f"bias, {unit}", "± sigma", "sum high", "sum low")
    slug = "".join(ch if ch.isalnum() else "-" for ch in name)
    return Figure(f"bias-{slug}", f"Bias of {name}", description, c, header, rows)
