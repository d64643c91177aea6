"""Elements of HTML and SVG as text: whatever is not marked as markup already is escaped."""

from __future__ import annotations

from html import escape
from typing import Any

__all__ = ["Markup", "element", "join", "text_of"]

_VOID = frozenset({"meta", "link", "input", "br", "hr"})


class Markup(str):
    """Text that is markup already; only `element` and `join` make it from values."""

    __slots__ = ()


def text_of(value: object) -> str:
    """Return markup as it is and anything else escaped, without characters that no document may hold."""
    if isinstance(value, Markup):
        return value
    shown = "".join(c if c >= " " or c in "\n\t" else "\ufffd" for c in str(value))
    return escape(shown)


def join(*children: object) -> Markup:
    """Put pieces one behind the other; None is left out."""
    return Markup("".join(text_of(c) for c in children if c is not None))


def element(name: str, /, *children: object, **attributes: Any) -> Markup:
    """Make an element.

    Parameters
    ----------
    name : str
        A constant of this program, never input.
    *children : object
        Escaped unless they are `Markup`; None is left out.
    **attributes
        ``class_`` is class, an inner underscore a hyphen; None and False are left out, True stands alone. Numbers are
        written with at most two decimals.

    Returns
    -------
    Markup
    """
    parts = [name]
    for key, value in attributes.items():
        if value is None or value is False:
            continue
        label = key.rstrip("_").replace("_", "-")
        if value is True:
            parts.append(label)
            continue
        if isinstance(value, float):
            value = f"{value:.2f}".rstrip("0").rstrip(".")
        parts.append(f'{label}="{text_of(str(value))}"')
    opening = " ".join(parts)
    if name in _VOID:
        return Markup(f"<{opening}>")
    return Markup(f"<{opening}>{join(*children)}</{name}>")
