"""Which faults look alike: correlation of their signatures."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from ..canvas import Canvas, cut, text_width
from ..markup import Markup, element
from .sheet import Figure

__all__ = ["correlation_of", "look_alikes"]

Array = npt.NDArray[np.float64]

CELL_W, CELL_H = 46.0, 26.0
ALIKE = 0.9


def correlation_of(signatures: Array) -> Array:
    """Cosines between signatures, shape (k, k); nan for those that nothing checks.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
    """
    norms = np.linalg.norm(signatures, axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray((signatures.T @ signatures) / np.outer(norms, norms), dtype=np.float64)


def look_alikes(names: Sequence[str], correlation: Array) -> Figure | None:
    """Draw the lower triangle of correlations between signatures, with the number in each cell.

    Parameters
    ----------
    names : sequence of str, length k
    correlation : ndarray, shape (k, k)

    Returns
    -------
    Figure or None
        None for less than two faults.
    """
    k = len(names)
    if k < 2:
        return None
    left = min(190.0, 16 + max(text_width(n, 12) for n in names[1:]))
    slant = 0.72 * max(text_width(cut(n, 130, 12), 12) for n in names[:-1])
    top = 20.0 + slant
    width = max(left + CELL_W * (k - 1) + slant + 20, 560.0)
    height = top + CELL_H * (k - 1) + 44
    c = Canvas(width, height)
    for j, name in enumerate(names[:-1]):
        c.add(_slanted(cut(name, 130, 12), left + CELL_W * (j + 0.5), top - 6))
    alike = []
    for i in range(1, k):
        y = top + CELL_H * (i - 1)
        c.text((left - 8, y + 17), cut(names[i], left - 14, 12), "ink", 12, "end")
        for j in range(i):
            r = float(correlation[i, j])
            x = left + CELL_W * j
            near = abs(r) >= ALIKE
            same = abs(r) >= 1 - 1e-9
            if near:
                alike.append((i, j))
            c.box(
                x + 1, y + 1, CELL_W - 2, CELL_H - 2, "glow" if near else "wash" if abs(r) >= 0.5 else "card",
                edge="mark" if near else "hair", edge_width=2.0 if same else 1.0, round_=3,
            )  # fmt: skip
            text = ("=" if same else "") + (f"{r:+.2f}" if abs(r) >= 0.005 else "0.00")
            c.text((x + CELL_W / 2, y + 17), text, "mark" if near else "ink", 12, "middle", bold=near)
    y = height - 14
    c.text((16, y), "= cannot be told apart by any reading here; framed: hard to tell apart (0.9 and more)", "soft", 12)
    told = [f"{names[i]} and {names[j]}" for i, j in alike[:4]]
    description = f"Correlation between the signatures of {k} possible faults" + (
        f"; hard or impossible to tell apart: {', '.join(told)}{' and more' if len(alike) > 4 else ''}."
        if told
        else "; all of them can be told apart."
    )
    rows = [
        (names[i], names[j], f"{correlation[i, j]:+.3f}", _word(float(correlation[i, j])))
        for i in range(1, k)
        for j in range(i)
    ]
    return Figure(
        "look-alikes",
        "Which faults look alike",
        description,
        c,
        ("fault", "and", "correlation", "word"),
        rows,
        stretches=False,
    )


def _word(r: float) -> str:
    return "cannot be told apart" if abs(r) >= 1 - 1e-9 else "hard to tell apart" if abs(r) >= ALIKE else "differ"


def _slanted(text: str, x: float, y: float) -> Markup:
    return element("text", text, class_="f-ink", font_size=12, transform=f"translate({x:.1f} {y:.1f}) rotate(-45)")
