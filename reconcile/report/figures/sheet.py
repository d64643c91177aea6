"""A figure: a drawing, one sentence that says what it shows, and the numbers behind it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from ...errors import InputError, MissingExtra, Problem
from ..canvas import HATCH, Canvas
from ..markup import Markup, element, join
from ..palette import LIGHT, figure_style
from ..tables import html_table

__all__ = ["Figure"]


@dataclass(frozen=True)
class Figure:
    """A figure that can stand in a page, in a notebook or in a file.

    Attributes
    ----------
    name : str
        Short name, also of its file.
    title : str
    description : str
        One sentence for those who cannot see it.
    canvas : Canvas
    header : tuple of str
    rows : sequence of sequences of str
        The numbers behind it, as text.
    """

    name: str
    title: str
    description: str
    canvas: Canvas
    header: tuple[str, ...]
    rows: Sequence[Sequence[str]]
    stretches: bool = True
    """Whether a page may stretch it to its own width."""

    def svg(self, prefix: str = "", *, alone: bool = False) -> Markup:
        """Return the drawing as an SVG element.

        Parameters
        ----------
        prefix : str
            Put before its ids, so that a page can hold the figure more than once.
        alone : bool
            Bring colours along; otherwise the page around it has them.
        """
        title, description = f"{prefix}{self.name}-title", f"{prefix}{self.name}-text"
        c = self.canvas
        inside = (
            join(element("style", Markup(figure_style(LIGHT))), element("defs", HATCH)),
            element("rect", width=c.width, height=c.height, class_="f-card"),
        )
        return element(
            "svg",
            element("title", self.title, id=title),
            element("desc", self.description, id=description),
            *(inside if alone else ()),
            c.markup(),
            xmlns="http://www.w3.org/2000/svg" if alone else None,
            class_="figure-of-flows",
            viewBox=f"0 0 {c.width:.0f} {c.height:.0f}",
            width=f"{c.width:.0f}",
            height=f"{c.height:.0f}",
            role="img",
            aria_labelledby=f"{title} {description}",
        )

    def html(self, prefix: str = "", *, numbers_in: str | None = None) -> Markup:
        """Return the figure for a page: drawing, sentence, numbers.

        Parameters
        ----------
        prefix : str
            Put before its ids.
        numbers_in : str, optional
            Caption of a table beside the figure that holds its numbers already; otherwise they are folded in below.
        """
        name = f"{prefix}{self.name}"
        if numbers_in is not None:
            numbers = None
        else:
            numbers = element(
                "details",
                element("summary", "Numbers of this figure"),
                html_table(f"{self.title}: numbers", self.header, self.rows, name=f"{name}-numbers"),
            )
        told = f"{self.description} Its numbers stand in the table “{numbers_in}”." if numbers_in else self.description
        frame = element(
            "div", self.svg(prefix), class_="scroll", tabindex="0", role="group", aria_label=f"Figure: {self.title}"
        )
        caption = element("figcaption", element("strong", self.title), " ", element("span", told))
        return element(
            "figure", caption, frame, numbers, id=f"{name}-figure", class_="fits" if self.stretches else None
        )

    def to_svg(self) -> str:
        """Return a whole SVG file."""
        return '<?xml version="1.0" encoding="UTF-8"?>\n' + self.svg(alone=True) + "\n"

    def to_png(self, zoom: float = 2.0) -> bytes:
        """Return a PNG file.

        Raises
        ------
        MissingExtra
            If the library that turns drawings into pixels is not installed.
        """
        try:
            import resvg_py
        except ImportError:
            raise MissingExtra("resvg-py", "report", "writing figures as PNG") from None
        return bytes(
            resvg_py.svg_to_bytes(
                svg_string=self.to_svg(),
                zoom=zoom,
                background=LIGHT["card"],
                font_family="DejaVu Sans",
                sans_serif_family="DejaVu Sans",
            )
        )

    def save(self, path: str | Path) -> Path:
        """Write the figure into a file; its suffix, ``.svg`` or ``.png``, says how.

        Raises
        ------
        InputError
            For another suffix.
        """
        from ..files import write_whole

        file = Path(path)
        suffix = file.suffix.lower()
        if suffix not in (".svg", ".png"):
            raise InputError(
                Problem(
                    "figure-format", f"figures cannot be written as {file.suffix or file.name!r}", "end in .svg or .png"
                )
            )
        write_whole(file, self.to_svg().encode() if suffix == ".svg" else self.to_png())
        return file

    def _repr_html_(self) -> str:
        style = element("style", Markup(figure_style(LIGHT)))
        hatching = element("svg", element("defs", HATCH), width="0", height="0", aria_hidden="true")
        return join(style, hatching, self.html())
