"""A result in a notebook: verdict, tables and two small figures, every label escaped, nothing fetched."""

from __future__ import annotations

import math
from base64 import b64encode
from collections.abc import Sequence
from html import escape
from typing import TYPE_CHECKING

from .campaign import why_not
from .numbers import plain, signed
from .words import MARKS, explanations_in_words, remarks_on_explanations, verdict_line

if TYPE_CHECKING:
    from ..results import Result
    from .figures import Figure

__all__ = ["render_html"]

MOST_ROWS, MOST_STREAMS, WIDTH = 60, 40, 680
"""Rows of a table, bars and streams of a figure that a notebook still shows; width of a figure in pixels."""


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
    usable = [i for i in range(result.size) if i not in result.table.failed]
    if result.size > 1:
        rows = [_line(result, i) for i in range(min(result.size, MOST_ROWS))]
        parts.append(_table("Snapshots", ("snapshot", "χ²", "checks", "word"), rows))
        if result.size > MOST_ROWS:
            parts.append(f"<p>{result.size - MOST_ROWS} more.</p>")
    elif usable:
        s = result.snapshot(0)
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
        told = explanations_in_words(s)
        if told:
            parts.append("<ol>" + "".join(f"<li>{escape(' '.join(lines))}</li>" for lines in told) + "</ol>")
        parts += [f"<p>{escape(remark)}</p>" for remark in remarks_on_explanations(s)]
    if usable:
        parts += _figures(result)
    parts += [f"<p>{escape(c)}</p>" for c in result.cautions]
    return "".join(parts) + "</section>"


def _line(result: Result, index: int) -> tuple[str, str, str, str]:
    if index in result.table.failed:
        return (result.labels[index], "-", "-", why_not(result, index))
    word = result.words[index]
    return (
        result.labels[index],
        f"{result.objective[index]:.2f}",
        str(result.checks[index]),
        f"{MARKS[word]} {word}",
    )


def _figures(result: Result) -> list[str]:
    """Adjustments and network of the one snapshot, or of the one that stands for many."""
    from . import figures
    from .page_end import typical
    from .page_snapshot import snapshot_name

    index = typical(result)
    of = "" if result.size == 1 else f", {snapshot_name(result, index)}"
    bars = figures.adjustments(result, index)
    drawn = [bars] if bars is not None and len(bars.rows) <= MOST_ROWS else []
    if result.spec is not None and len(result.spec.streams) <= MOST_STREAMS:
        network = figures.network(result, index)
        drawn += [network] if network is not None else []
    return [_image(f, of) for f in drawn]


def _image(figure: Figure, of: str) -> str:
    """Figure as an image: neither its ids nor its style reach the notebook around it."""
    data = b64encode(figure.to_svg().encode()).decode("ascii")
    return (
        f'<figure><img width="{min(WIDTH, round(figure.canvas.width))}" alt="{escape(figure.description)}" '
        f'src="data:image/svg+xml;base64,{data}"><figcaption>{escape(figure.title + of)}</figcaption></figure>'
    )


def _table(caption: str, header: tuple[str, ...], rows: Sequence[Sequence[object]]) -> str:
    head = "".join(f'<th scope="col">{escape(h)}</th>' for h in header)
    body = "".join("<tr>" + "".join(f"<td>{escape(str(c))}</td>" for c in row) + "</tr>" for row in rows)
    return f"<table><caption>{escape(caption)}</caption><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"
