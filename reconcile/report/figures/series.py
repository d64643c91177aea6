"""Readings over time: raw, adjusted, how sure, and where they were flagged."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..campaign import why_not
from ..canvas import Canvas, Scale, cut, text_width, tick_text, ticks
from ..markup import Markup, element
from ..numbers import plain
from .axes import Course, frame, label_course, place_of, thinned
from .sheet import Figure

if TYPE_CHECKING:
    from ...results import Result

__all__ = ["FLAGS", "series", "time_series"]

Array = npt.NDArray[np.float64]

PANEL, PANELS, MOST_FIGURES, FEW = 118.0, 6, 2, 6

FLAGS = {"X": "does not agree", "W": "watch", "N": "not solved", "L": "left out", "S": "stands out"}
"""Letter of a flagged span, and what it stands for."""


def series(result: Result, tags: Sequence[str] | None = None) -> list[Figure]:
    """Draw readings over all snapshots, a panel a meter, six panels a figure.

    Parameters
    ----------
    result : Result
    tags : sequence of str, optional
        Meters to draw; those that explanations name first when left out, and no more than 12.

    Returns
    -------
    list of Figure
        Empty for one snapshot.
    """
    if result.size < 2:
        return []
    if tags is None:
        tags = _worth(result)[: PANELS * MOST_FIGURES]
    failed = {i: "L" if why_not(result, i).startswith("left out") else "N" for i in result.table.failed}
    flags = [failed.get(i) or _letter(result.words[i]) for i in range(result.size)]
    drawn = []
    for k in range(0, len(tags), PANELS):
        panels = []
        for tag in tags[k : k + PANELS]:
            m = result.tags.index(tag)
            i = int(result.model.meters[m])
            reading = result.model.readings[i]
            value, sigma = _adjusted(result, i)
            panels.append((tag, reading.unit, result.readings[:, m], value, sigma))
        name = "series" if len(tags) <= PANELS else f"series-{k // PANELS + 1}"
        drawn.append(time_series(result.labels, panels, flags, name=name))
    return drawn


def time_series(
    labels: Sequence[str],
    panels: Sequence[tuple[str, str, Array, Array, Array]],
    flags: Sequence[str],
    *,
    own: Mapping[str, Sequence[str]] | None = None,
    name: str = "series",
    title: str = "",
    noun: str = "snapshots",
) -> Figure:
    """Draw panels of raw and adjusted values with a band of two sigmas.

    Parameters
    ----------
    labels : sequence of str, length N
    panels : sequence of (tag, unit, raw, adjusted, sigma)
        Arrays of shape (N,), nan where there is nothing.
    flags : sequence of str, length N
        A letter of `FLAGS` for each snapshot, or an empty text.
    own : mapping of tag to such letters, optional
        Instead of `flags` in the panel of that tag.
    name, title : str
        Of the figure.
    noun : str
        What the labels are labels of.

    Returns
    -------
    Figure
    """
    own = own or {}
    course = place_of(labels)
    height = 34 + PANEL * len(panels) + 30
    c = Canvas(course.width, height)
    _key(c, course, [f for per in (flags, *own.values()) for f in per])
    rows = []
    for k, (tag, unit, raw, value, sigma) in enumerate(panels):
        top, bottom = 34 + PANEL * k + 26, 34 + PANEL * (k + 1) - 6
        rows += _panel(c, course, (top, bottom), tag, unit, raw, value, sigma, own.get(tag, flags))
    label_course(c, course, 34 + PANEL * len(panels) - 6)
    flagged = sum(any(per[i] for per in (flags, *own.values())) for i in range(len(labels)))
    description = (
        f"Raw readings (dots), adjusted values (line) and their band of ±2 sigmas for {', '.join(p[0] for p in panels)} over "
        f"{len(labels)} {noun}, {flagged} of them flagged."
        + (" Of each short stretch the extremes are drawn." if len(labels) > 240 else "")
    )
    header = ("meter", noun.removesuffix("s"), "unit", "raw", "adjusted", "± sigma", "flag")
    title = title or f"{'Readings' if len(panels) > 1 else panels[0][0]} over the {noun}"
    return Figure(name, title, description, c, header, rows)


def _letter(word: str) -> str:
    return next((k for k, v in FLAGS.items() if v == word), "")


def _worth(result: Result) -> list[str]:
    """Meters, those first that moved most in the flagged snapshots."""
    moved = {}
    for m, tag in enumerate(result.tags):
        i = int(result.model.meters[m])
        value, _ = _adjusted(result, i)
        raw = result.readings[:, m]
        with np.errstate(invalid="ignore"):
            off = np.abs(raw - value)[np.asarray(result.suspicious)]
        sigma = max((float(g.sigma[i] / abs(result.model.factor[i])) for g in result.table.groups), default=math.nan)
        moved[tag] = float(np.nanmax(off / sigma)) if np.isfinite(off).any() and sigma > 0 else 0.0
    if len(moved) <= PANELS:
        return list(moved)
    return sorted(moved, key=lambda t: -moved[t])


def _adjusted(result: Result, reading: int) -> tuple[Array, Array]:
    """Adjusted value of a reading in its own unit over all snapshots, and its sigma."""
    model = result.model
    r = model.readings[reading]
    value, sigma = np.full(result.size, np.nan), np.full(result.size, np.nan)
    terms = [(model.system.column(n), k) for n, k in r.reads]
    for group in result.table.groups:
        if not all(group.determined[c] for c, _ in terms):
            continue
        value[group.rows] = (sum(k * group.x[:, c] for c, k in terms) - r.offset) / r.factor
        sigma[group.rows] = float(np.linalg.norm(sum(k * group.cover[c] for c, k in terms))) / abs(r.factor)
    return value, sigma


def _key(c: Canvas, course: Course, flags: Sequence[str]) -> None:
    x = course.left
    c.dot((x + 4, 16), 3, "ink", hollow=True)
    c.text((x + 12, 20), "raw", "soft", 12)
    x += 52
    c.line((x, 16), (x + 22, 16), "main", 2)
    c.text((x + 28, 20), "adjusted", "soft", 12)
    x += 96
    c.box(x, 10, 22, 12, "wash")
    c.text((x + 28, 20), "±2 sigmas", "soft", 12)
    x += 104
    for letter, word in FLAGS.items():
        if letter in flags:
            c.box(x, 10, 22, 12, None, edge="mark", hatched=True)
            c.text((x + 28, 20), f"{letter} {word}", "soft", 12)
            x += 42 + text_width(f"{letter} {word}", 12)


def _panel(
    c: Canvas,
    course: Course,
    span: tuple[float, float],
    tag: str,
    unit: str,
    raw: Array,
    value: Array,
    sigma: Array,
    flags: Sequence[str],
) -> list[tuple[str, ...]]:
    top, bottom = span
    every = np.concatenate([raw, value + 2 * sigma, value - 2 * sigma])
    every = every[np.isfinite(every)]
    low, high = (float(every.min()), float(every.max())) if every.size else (0.0, 1.0)
    room = 0.08 * (high - low) or 1.0
    y = Scale(low - room, high + room, bottom, top)
    c.text((course.left, top - 6), cut(f"{tag}, {unit}" if unit else tag, 400, 12), "ink", 12, bold=True)
    shown = ticks(y.low, y.high, 3)
    step = shown[1] - shown[0] if len(shown) > 1 else 1.0
    for v in shown:
        c.line((course.left, y(v)), (course.right, y(v)), "hair")
        c.text((course.left - 8, y(v) + 4), tick_text(v, step), "soft", 12, "end")
    frame(c, course, top, bottom)
    letters = _hatches(c, course, flags, top, bottom)
    spots = sorted({*thinned(raw, course), *thinned(value, course)})
    if len(flags) < FEW:
        _single(c, course, y, [i for i in spots if np.isfinite(value[i])], value, sigma)
    else:
        for run in _runs([i for i in spots if np.isfinite(value[i])], value):
            upper = [(course.x[i], y(value[i] + 2 * sigma[i])) for i in run]
            lower = [(course.x[i], y(value[i] - 2 * sigma[i])) for i in reversed(run)]
            c.area([*upper, *lower], "wash")
            c.polyline([(course.x[i], y(value[i])) for i in run], "main", 2)
            if len(run) == 1:
                _single(c, course, y, run, value, sigma)
    for i in spots:
        if np.isfinite(raw[i]):
            c.dot((course.x[i], y(raw[i])), 3.0 if len(spots) < 80 else 1.6, "ink", hollow=len(spots) < 80)
    for x, letter in letters:
        c.text((x, top - 4), letter, "mark", 12, "middle", bold=True, halo=True)
    return [
        (
            tag, course.labels[i], unit, plain(raw[i], sigma[i]), plain(value[i], sigma[i]), plain(sigma[i], sigma[i]),
            flags[i],
        )
        for i in spots
    ]  # fmt: skip


def _single(c: Canvas, course: Course, y: Scale, spots: Sequence[int], value: Array, sigma: Array) -> None:
    """Draw snapshots that stand alone as bars of ±2 sigmas."""
    for i in spots:
        high, low = y(value[i] + 2 * sigma[i]), y(value[i] - 2 * sigma[i])
        c.box(course.x[i] - 9, high, 18, low - high, "wash")
        c.line((course.x[i] - 12, y(value[i])), (course.x[i] + 12, y(value[i])), "main", 2)


def _runs(spots: Sequence[int], value: Array) -> list[list[int]]:
    """Stretches without a gap: a value that is missing between two points breaks the line."""
    out: list[list[int]] = []
    for i in spots:
        if out and np.isfinite(value[out[-1][-1] : i + 1]).all():
            out[-1].append(i)
        else:
            out.append([i])
    return out


def _hatches(c: Canvas, course: Course, flags: Sequence[str], top: float, bottom: float) -> list[tuple[float, str]]:
    """Hatch flagged spans; returns where their letters belong."""
    letters: list[tuple[float, str]] = []
    half = max(course.step / 2, 1.0)
    i = 0
    while i < len(flags):
        j = i
        while j + 1 < len(flags) and flags[j + 1] == flags[i]:
            j += 1
        if flags[i]:
            a, b = max(course.x[i] - half, course.left), min(course.x[j] + half, course.right)
            c.add(_pale(a, top, b - a, bottom - top))
            if b - a > 9:
                letters.append(((a + b) / 2, flags[i]))
        i = j + 1
    return letters


def _pale(x: float, y: float, width: float, height: float) -> Markup:
    return element(
        "rect", x=x, y=y, width=width, height=height, style="fill:url(#hatch-of-flows)", opacity="0.45"
    )  # fmt: skip
