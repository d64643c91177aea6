"""A result in a notebook: verdict and tables, every label escaped."""

from __future__ import annotations

import math
from collections.abc import Sequence
from html import escape
from typing import TYPE_CHECKING

from .numbers import plain, signed
from .words import MARKS, explanation_sentences, verdict_line

if TYPE_CHECKING:
    from ..results import Result

__all__ = ["render_html"]

MOST_ROWS = 60


def render_html(result: Result) -> str:
    """Render a result as an HTML fragment.

    Parameters
    ----------
    result : Result

    Returns
    -------
    str
    """
    parts = [f"<section><h3>{escape(result.title)}</h3><p><strong>{escape(verdict_line(result))}</strong></p>"]
    shown = next((i for i in range(result.size) if i not in result.table.failed), None)
    if result.size > 1:
        rows = [
            (
                result.labels[i],
                f"{result.objective[i]:.2f}",
                str(result.checks[i]),
                f"{MARKS[result.words[i]]} {result.words[i]}",
            )
            for i in range(min(result.size, MOST_ROWS))
        ]
        parts.append(_table("Snapshots", ("snapshot", "χ²", "checks", "word"), rows))
    elif shown is not None:
        s = result.snapshot(shown)
        rows_ = [
            (
                r.tag,
                r.reads,
                r.unit,
                plain(r.reading, r.sigma_before),
                plain(r.adjusted, r.sigma),
                plain(r.sigma, r.sigma),
                signed(r.in_sigmas, 0.1),
                f"{r.share:.2f}",
                signed(r.z, 0.1) if math.isfinite(r.z) else "-",
                r.word,
            )
            for r in s.readings
        ]
        header = ("meter", "reads", "unit", "read", "adjusted", "±", "moved in ±", "checked", "z", "word")
        parts.append(_table("Readings", header, rows_))
        told = explanation_sentences(s)
        if told:
            parts.append("<ol>" + "".join(f"<li>{escape(t)}</li>" for t in told) + "</ol>")
    parts += [f"<p>{escape(c)}</p>" for c in result.cautions]
    return "".join(parts) + "</section>"


def _table(caption: str, header: tuple[str, ...], rows: Sequence[Sequence[object]]) -> str:
    head = "".join(f'<th scope="col">{escape(h)}</th>' for h in header)
    body = "".join("<tr>" + "".join(f"<td>{escape(str(c))}</td>" for c in row) + "</tr>" for row in rows)
    return f"<table><caption>{escape(caption)}</caption><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
