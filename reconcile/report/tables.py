"""Tables of a page: a caption, header cells for columns and rows, every label escaped."""

from __future__ import annotations

from collections.abc import Sequence

from .markup import Markup, element

__all__ = ["html_table"]

Cell = object

LONG = 28
"""Cells with more characters may be broken into lines."""


def html_table(
    caption: str,
    header: Sequence[str],
    rows: Sequence[Sequence[Cell]],
    *,
    name: str,
    left: Sequence[int] = (0,),
    sortable: bool = False,
    note: object = None,
    marked: Sequence[int] = (),
) -> Markup:
    """Lay out a table that scrolls by itself where it is wider than the page.

    Parameters
    ----------
    caption : str
    header : sequence of str
    rows : sequence of sequences
        The first cell of each names the row.
    name : str
        Id in the page.
    left : sequence of int
        Columns of words, flush left; numbers are flush right.
    sortable : bool
        Whether the script of the page may offer to sort it.
    note : object, optional
        A sentence below the table.
    marked : sequence of int
        Rows that get a bar at their left, beside the word that says why.

    Returns
    -------
    Markup
    """
    words = frozenset(left)
    head = [element("th", h, scope="col", class_="w" if i in words else None) for i, h in enumerate(header)]
    strong = frozenset(marked)
    body = []
    for j, row in enumerate(rows):
        cells = [
            element("th" if i == 0 else "td", c, scope="row" if i == 0 else None, class_=_class(c, i in words))
            for i, c in enumerate(row)
        ]
        body.append(element("tr", *cells, class_="marked" if j in strong else None))
    table = element(
        "table",
        element("caption", caption, id=f"{name}-caption"),
        element("thead", element("tr", *head)),
        element("tbody", *body),
        id=name,
        class_="sortable" if sortable else None,
    )
    scroll = element("div", table, class_="scroll", tabindex="0", role="group", aria_labelledby=f"{name}-caption")
    return element("div", scroll, element("p", note, class_="note") if note else None, class_="table")


def _class(cell: Cell, word: bool) -> str | None:
    if not word:
        return None
    return "w long" if len(str(cell)) > LONG else "w"
