"""The axis along which snapshots follow each other: time where the labels are times, else their order."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime

import numpy as np
import numpy.typing as npt

from ..canvas import Canvas, Scale, cut, text_width

__all__ = ["Course", "frame", "label_course", "place_of", "thinned"]

Array = npt.NDArray[np.float64]

WIDTH, LEFT, RIGHT, MOST_POINTS = 760.0, 78.0, 744.0, 200

_TIME = re.compile(r"\d{4}-\d\d-\d\d")


@dataclass(frozen=True)
class Course:
    """Where snapshots lie from left to right.

    Attributes
    ----------
    labels : tuple of str
    x : tuple of float
        Pixels.
    left, right, width : float
        Ends of the axis, and width of the sheet.
    timed : bool
        Whether distances are times.
    """

    labels: tuple[str, ...]
    x: tuple[float, ...]
    left: float
    right: float
    width: float
    timed: bool

    @property
    def step(self) -> float:
        """Pixels between neighbours, in the middle of all."""
        return float(np.median(np.diff(self.x))) if len(self.x) > 1 else self.right - self.left


def place_of(labels: Sequence[str], *, left: float = LEFT, right: float = RIGHT) -> Course:
    """Lay labels out along an axis; times keep their distances, so that gaps stay gaps.

    Parameters
    ----------
    labels : sequence of str
        One for each snapshot, in order.
    left, right : float
        Pixels.

    Returns
    -------
    Course
    """
    times = _times(labels)
    values = times if times is not None else np.arange(len(labels), dtype=float)
    # Half a step stays free at both ends, so that flagged spans around the first and the last have room.
    room = max(8.0, (right - left) / (2 * max(len(labels), 1)))
    last = float(values[-1]) if len(values) > 1 else 1.0
    scale = Scale(0.0, last, left + room, right - room)
    return Course(tuple(labels), tuple(scale(float(v)) for v in values), left, right, WIDTH, times is not None)


def _times(labels: Sequence[str]) -> Array | None:
    if not labels or not all(_TIME.match(t) for t in labels):
        return None
    try:
        found = [datetime.fromisoformat(t) for t in labels]
        seconds = np.array([(t - found[0]).total_seconds() for t in found])
    except (ValueError, TypeError):
        return None
    return seconds if np.all(np.diff(seconds) > 0) else None


def thinned(values: Array, course: Course) -> list[int]:
    """Snapshots worth a point: all of them, or of each short stretch the lowest and the highest."""
    finite = np.flatnonzero(np.isfinite(values))
    if finite.size <= MOST_POINTS:
        return [int(i) for i in finite]
    kept: set[int] = set()
    for part in np.array_split(finite, MOST_POINTS // 2):
        kept.add(int(part[np.argmin(values[part])]))
        kept.add(int(part[np.argmax(values[part])]))
    return sorted(kept)


def frame(c: Canvas, course: Course, top: float, bottom: float) -> None:
    """Draw the base line."""
    c.line((course.left, bottom), (course.right, bottom), "line", 1)


def label_course(c: Canvas, course: Course, bottom: float) -> None:
    """Write as many labels below the axis as fit."""
    count = len(course.labels)
    widest = min(max((text_width(t, 12) for t in course.labels), default=1.0), 150.0) + 18
    most = max(2, int((course.right - course.left) / widest))
    chosen = sorted({round(k) for k in np.linspace(0, count - 1, min(most, count))})
    end = -np.inf
    for i in chosen:
        text = cut(course.labels[i].replace("T", " ") if course.timed else course.labels[i], 150, 12)
        half = text_width(text, 12) / 2
        x = min(max(course.x[i], half + 2), course.width - half - 2)
        # Counts that do not divide evenly bring two labels too close to each other.
        if x - half < end + 6:
            continue
        end = x + half
        c.line((course.x[i], bottom), (course.x[i], bottom + 4), "line")
        c.text((x, bottom + 18), text, "soft", 12, "middle")
