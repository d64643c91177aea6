"""What was understood of a table, and what is left for the user to fill in."""

from __future__ import annotations

from typing import TYPE_CHECKING

from .layout import table, to_ascii, wrap

if TYPE_CHECKING:
    from ..start import Started

__all__ = ["render_start"]


def render_start(made: Started, *, ascii_only: bool = False) -> str:
    """Render what a skeleton rests on, as text of at most 100 columns.

    Parameters
    ----------
    made : Started
    ascii_only : bool
        For terminals that cannot show more.

    Returns
    -------
    str
    """
    out = ["READINGS", *(f"  {line}" for line in made.echo), ""]
    rows = [
        (c.name, c.unit or "?", c.kind, c.why, c.sigma.removeprefix("default(").removesuffix(")")) for c in made.columns
    ]
    out.append(table(("COLUMN", "unit", "kind", "told from", "sigma (a guess)"), rows, left=(0, 1, 2, 3, 4)))
    out += [wrap(str(n)) for n in made.notices]
    if made.path is not None:
        out += ["", f"Wrote {made.path}."]
    count = len(made.to_fill)
    lines = ", ".join(str(i) for i in made.to_fill[:20]) + (", ..." if count > 20 else "")
    what = "1 line is" if count == 1 else f"{count} lines are"
    out.append(wrap(f"{what} left to fill in: {lines}. Then run: reconcile check {made.path or 'CASE'}", ""))
    text = "\n".join(out) + "\n"
    return to_ascii(text) if ascii_only else text
