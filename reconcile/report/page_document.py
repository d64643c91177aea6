"""The shell of a page: head, verdict, contents, sections, footer; the same for every kind of answer."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from importlib.resources import files
from typing import Any

from .canvas import HATCH
from .markup import Markup, element
from .palette import DARK, LIGHT, figure_style, variables
from .words import MARKS

__all__ = ["Sections", "document", "verdict_box"]

Sections = Sequence[tuple[str, str, Markup]]
"""Sections of a page: id, title, content."""

_CLASSES = {"agrees": "is-yes", "watch": "is-watch named", "does not agree": "is-no named", "cannot tell": "is-open"}


def document(title: str, verdict: Markup, sections: Sections, provenance: Mapping[str, Any]) -> str:
    """Put a whole HTML document together.

    Parameters
    ----------
    title : str
    verdict : Markup
        See `verdict_box`.
    sections : sequence of (id, title, content)
    provenance : mapping
        Its entry ``program`` is named in the footer.

    Returns
    -------
    str
    """
    style = (
        f":root{{{variables(LIGHT)}}}"
        f"@media (prefers-color-scheme: dark){{:root{{{variables(DARK)}}}}}"
        f"@media print{{:root{{{variables(LIGHT)}}}}}" + _asset("page.css") + figure_style()
    )
    head = element(
        "head",
        element("meta", charset="utf-8"),
        element("meta", name="viewport", content="width=device-width, initial-scale=1"),
        element("title", f"{title}: reconciled readings"),
        element("link", rel="icon", href="data:,"),
        element("style", Markup(style)),
    )
    hatching = element(
        "svg", element("defs", HATCH), width="0", height="0", style="position:absolute", aria_hidden="true"
    )
    contents = element(
        "nav",
        element("ul", *(element("li", element("a", heading, href=f"#{name}")) for name, heading, _ in sections)),
        aria_label="Contents",
    )
    body = element(
        "body",
        element("a", "Skip to the findings", href="#verdict", class_="skip"),
        hatching,
        element(
            "div",
            element("header", element("h1", title), verdict, contents),
            element(
                "main",
                *(
                    element(
                        "section",
                        element("h2", heading, id=f"{name}-heading"),
                        part,
                        id=name,
                        aria_labelledby=f"{name}-heading",
                    )
                    for name, heading, part in sections
                ),
            ),
            _footer(provenance),
            class_="wrap",
        ),
        element("script", Markup(_asset("page.js"))),
    )
    return "<!DOCTYPE html>\n" + element("html", head, body, lang="en") + "\n"


def verdict_box(word: str, said: str, text: str) -> Markup:
    """Lay out a verdict: its word with a mark, and the sentences behind it.

    Parameters
    ----------
    word : str
        Word of evidence.
    said : str
        What stands as the headline; the word itself, or how many there are of it.
    text : str
    """
    return element(
        "div",
        element("span", MARKS[word], class_="sign", aria_hidden="true"),
        element("p", element("span", said[0].upper() + said[1:], class_="word"), text),
        class_=f"verdict {_CLASSES[word]}",
        id="verdict",
    )


def _footer(provenance: Mapping[str, Any]) -> Markup:
    stamped = f"Made by {provenance.get('program', 'reconcile-flows')}. " if provenance else ""
    return element(
        "footer",
        element(
            "p",
            f"{stamped}Reconciled numbers are estimates. A flagged reading is a reason to look, not a reason to act; where "
            "a legal meter or a device alarm exists, that one counts.",
        ),
    )


def _asset(name: str) -> str:
    return files(__package__).joinpath("assets", name).read_text(encoding="utf-8")
