"""Whether the readings agree, snapshot by snapshot."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..campaign import not_used, why_not
from ..canvas import Canvas, Scale
from ..numbers import plain
from .axes import frame, label_course, place_of, thinned
from .sheet import Figure

if TYPE_CHECKING:
    from ...results import Result

__all__ = ["evidence", "evidence_over"]

Array = npt.NDArray[np.float64]

HEIGHT = 230.0


def evidence(result: Result) -> Figure | None:
    """Draw the objective of every snapshot as a multiple of its limit.

    Parameters
    ----------
    result : Result

    Returns
    -------
    Figure or None
        None for one snapshot, or where nothing can be checked.
    """
    letters = {i: "L" if why_not(result, i).startswith("left out") else "N" for i in result.table.failed}
    failed = f", without adjusted values: {', '.join(not_used(result))}" if result.table.failed else ""
    return evidence_over(result.labels, result.objective, result.limit, result.words, letters, failed)


def evidence_over(
    labels: Sequence[str],
    objective: Array,
    limit: Array,
    words: Sequence[str],
    letters: Mapping[int, str] | None = None,
    without: str = "",
    noun: str = "snapshots",
) -> Figure | None:
    """Draw objectives as multiples of their limits.

    Parameters
    ----------
    labels : sequence of str, length N
    objective, limit : ndarray, shape (N,)
        nan where there is nothing to check.
    words : sequence of str, length N
        Word of evidence of each.
    letters : mapping of int to str, optional
        Letters at the base line, where there is no objective.
    without : str
        What is said of those.
    noun : str
        What the labels are labels of.

    Returns
    -------
    Figure or None
        None for one label, or where nothing can be checked.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.asarray(objective / limit, dtype=float)
    if len(labels) < 2 or not np.isfinite(ratio).any():
        return None
    course = place_of(labels)
    c = Canvas(course.width, HEIGHT)
    top, bottom = 34.0, HEIGHT - 34.0
    # Far outliers would flatten everything else: a root scale keeps both readable, zero stays zero.
    highest = max(1.2, float(np.nanmax(ratio)))
    y = Scale(0.0, highest**0.5 * 1.04, bottom, top)
    frame(c, course, top, bottom)
    values = [v for v in (0.0, 1.0, 4.0, 25.0, 100.0, 1000.0, 1e4, 1e5) if v <= highest]
    for v in values[:2] + values[2:][-3:]:
        if v != 1.0:
            c.line((course.left, y(v**0.5)), (course.right, y(v**0.5)), "hair")
            c.text((course.left - 8, y(v**0.5) + 4), f"{v:g}", "soft", 12, "end")
    c.line((course.left, y(1.0)), (course.right, y(1.0)), "mark", 1.5, "6 4")
    c.text((course.left - 8, y(1.0) + 4), "limit", "mark", 12, "end")
    dense = "" if course.step >= 9 else "; diamonds lie beyond the limit"
    c.text((course.left, 20), f"χ² as a multiple of its limit (root scale){dense}", "soft", 12)
    spots = thinned(ratio, course)
    radius = 4.0 if len(spots) <= 80 else 2.5
    for i in spots:
        at = (course.x[i], y(max(float(ratio[i]), 0.0) ** 0.5))
        if ratio[i] > 1.0:
            c.line((at[0], y(1.0)), at, "mark", 1.5)
            if course.step >= 9:
                mark = "✗" if words[i] == "does not agree" else "!"
                c.text((at[0], at[1] - 4), mark, "mark", 13, "middle", bold=True)
            else:
                c.area([(at[0], at[1] - 5), (at[0] + 3, at[1]), (at[0], at[1] + 5), (at[0] - 3, at[1])], "mark")
        else:
            c.dot(at, radius, "main")
    for i, letter in (letters or {}).items():
        c.text((course.x[i], bottom - 4), letter, "mark", 12, "middle", bold=True)
    label_course(c, course, bottom)
    beyond = int((ratio > 1.0).sum())
    description = (
        f"χ² of {len(labels)} {noun} as a multiple of its limit; beyond it: {beyond}{without}, the largest at "
        f"{highest:.3g} times the limit in {labels[int(np.nanargmax(ratio))]}."
    )
    rows = [
        (
            labels[i],
            plain(objective[i], 0.1),
            plain(limit[i], 0.1),
            plain(ratio[i], 0.1),
            words[i],
        )
        for i in spots
    ]
    return Figure(
        "evidence",
        "Do the readings agree?",
        description,
        c,
        (noun.removesuffix("s"), "χ²", "limit", "ratio", "word"),
        rows,
    )
