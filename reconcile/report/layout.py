"""Plain tables for a terminal of at most 100 columns."""

from __future__ import annotations

from collections.abc import Sequence

__all__ = ["ASCII", "table", "to_ascii", "wrap"]

WIDTH = 100

ASCII = {
    "±": "+/-",
    "χ²": "chi2",
    "✓": "[ok]",
    "✗": "[x]",
    "→": "->",
    "≤": "<=",
    "≥": ">=",
    "σ": "sigma",
    "–": "-",
    "—": "-",
}
"""What stands for each character where a terminal cannot show it."""


def to_ascii(text: str) -> str:
    """Replace what a plain terminal cannot show."""
    for character, plain in ASCII.items():
        text = text.replace(character, plain)
    return text.encode("ascii", "replace").decode("ascii")


def wrap(text: str, indent: str = "  ", width: int = WIDTH) -> str:
    """Break a paragraph into lines."""
    import textwrap

    return textwrap.fill(
        text,
        width=width,
        initial_indent=indent,
        subsequent_indent=indent,
        break_long_words=False,
        break_on_hyphens=False,
    )


def table(header: Sequence[str], rows: Sequence[Sequence[str]], *, left: Sequence[int] = (0,), keep: int = 3) -> str:
    """Lay out a table; columns are dropped from the right until it fits, the last one kept.

    Parameters
    ----------
    header : sequence of str
    rows : sequence of sequences of str
    left : sequence of int
        Columns set flush left; the others flush right.
    keep : int
        First columns that are never dropped.

    Returns
    -------
    str
    """
    chosen = list(range(len(header)))
    widths = [max(len(header[c]), *(len(r[c]) for r in rows)) if rows else len(header[c]) for c in chosen]
    while sum(widths[c] for c in chosen) + 2 * len(chosen) > WIDTH and len(chosen) > keep + 1:
        del chosen[-2]
    lines = []
    for line in (header, *rows):
        cells = [line[c].ljust(widths[c]) if c in left else line[c].rjust(widths[c]) for c in chosen]
        lines.append(("  " + "  ".join(cells)).rstrip())
    return "\n".join(lines)
