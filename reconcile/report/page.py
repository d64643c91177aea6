"""One self-contained page: everything that was found, readable without script, without network, and in print."""

from __future__ import annotations

from collections.abc import Sequence
from importlib.resources import files
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from ..errors import InputError, Problem
from . import figures
from .canvas import HATCH
from .files import write_whole
from .markup import Markup, element, join
from .page_end import appendix, assumptions, figures_of_knowledge, typical, unknowable
from .page_log import log_section
from .page_snapshot import explanations_part, snapshot_parts
from .page_snapshots import BYTES_OF_A_ROW, MOST_BYTES, one_at_a_time, over_time, overview, together
from .palette import DARK, LIGHT, figure_style, variables
from .words import MARKS, verdict_line

if TYPE_CHECKING:
    from ..hookspecs import Section
    from ..results import Result
    from ..run import Case

__all__ = ["figures_of", "render_page", "write_figures", "write_page"]

MOST_SNAPSHOTS = 20_000

_CLASSES = {"agrees": "is-yes", "watch": "is-watch named", "does not agree": "is-no named", "cannot tell": "is-open"}
_WORST = ("does not agree", "watch", "cannot tell", "agrees")


def write_page(result: Result, path: str | Path, *, case: Case | None = None) -> Path:
    """Write the page of a result.

    Parameters
    ----------
    result : Result
    path : path
        Its folder is made where it is missing; the file appears whole or not at all.
    case : Case, optional
        Where the result came from; with it the sections of plugins and advice on further meters are added.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        If the file cannot be written.
    PluginError
        If the section of a plugin failed.
    """
    if result.size > MOST_SNAPSHOTS:
        raise InputError(
            Problem(
                "report-too-long",
                f"{result.size} snapshots are too many for a page of at most {MOST_SNAPSHOTS}",
                "make a page of a part of them, or of windows of them",
            )
        )
    target = Path(path)
    write_whole(target, render_page(result, case=case).encode())
    return target


def render_page(result: Result, *, case: Case | None = None) -> str:
    """Render the page of a result; the same result gives the same text.

    Parameters
    ----------
    result : Result
    case : Case, optional
        See `write_page`.

    Returns
    -------
    str
        A whole HTML document.
    """
    usable = [i for i in range(result.size) if i not in result.table.failed]
    sections: list[tuple[str, str, Markup]] = []
    if result.size == 1 and usable:
        sections += [*snapshot_parts(result, 0), ("explanations", "Explanations", explanations_part(result, 0))]
    elif usable:
        drawn, joint = over_time(result), together(result)
        room = MOST_BYTES - len(drawn) - len(joint or "") - BYTES_OF_A_ROW * result.size
        details, shown = one_at_a_time(result, room)
        sections.append(("snapshots", "All snapshots", join(overview(result, shown), drawn)))
        sections += [("together", "What they say together", joint)] if joint is not None else []
        sections.append(("details", "One snapshot at a time", details))
    way = log_section(result)
    if way is not None:
        sections.append(("log", "From the log to the snapshots", way))
    if usable:
        sections.append(("unknown", "What cannot be known", unknowable(result, case)))
    sections.append(("assumptions", "Assumptions", assumptions(result)))
    sections += [(f"plugin-{k}", s.title, _plugin(s)) for k, s in enumerate(_sections_of_plugins(result, case), 1)]
    sections.append(("appendix", "Appendix for auditors", appendix(result)))
    return _document(result, sections)


def figures_of(result: Result, case: Case | None = None, snapshot: int | None = None) -> dict[str, figures.Figure]:
    """Every figure that has something to show, by its name.

    Parameters
    ----------
    result : Result
    case : Case, optional
        With it, meters that would tell suspects apart are drawn, too.
    snapshot : int, optional
        Counted from 0; the one that stands for the network when left out.

    Returns
    -------
    dict of str to Figure
    """
    if len(result.table.failed) == result.size:
        return {}
    index = typical(result) if snapshot is None else snapshot
    drawn = [
        figures.network(result, index),
        figures.balances(result, index),
        figures.adjustments(result, index),
        figures.evidence(result),
        *figures.series(result),
        *(figures.bias_tracks(result) if result.size > 1 and result.history.enough else []),
        figures.error_against_flow(result) if result.size > 1 and result.history.enough else None,
        *figures_of_knowledge(result, index, case),
    ]
    return {f.name: f for f in drawn if f is not None}


def write_figures(
    result: Result, folder: str | Path, suffix: Literal["svg", "png"], *, case: Case | None = None
) -> list[Path]:
    """Write every figure into a folder.

    Parameters
    ----------
    result : Result
    folder : path
    suffix : {"svg", "png"}
    case : Case, optional
        See `figures_of`.

    Returns
    -------
    list of Path

    Raises
    ------
    InputError
        If a file cannot be written.
    MissingExtra
        If PNG is asked for and the library for it is not installed.
    """
    return [f.save(Path(folder) / f"{name}.{suffix}") for name, f in figures_of(result, case).items()]


def _sections_of_plugins(result: Result, case: Case | None) -> Sequence[Section]:
    if case is None:
        return ()
    return [s for _, offered in case.plugins.each("reconcile_sections", result=result) for s in offered or ()]


def _plugin(section: Section) -> Markup:
    return element("div", *(element("p", part) for part in section.text.split("\n\n")), class_="plugin")


def _document(result: Result, sections: Sequence[tuple[str, str, Markup]]) -> str:
    style = (
        f":root{{{variables(LIGHT)}}}"
        f"@media (prefers-color-scheme: dark){{:root{{{variables(DARK)}}}}}"
        f"@media print{{:root{{{variables(LIGHT)}}}}}" + _asset("page.css") + figure_style()
    )
    head = element(
        "head",
        element("meta", charset="utf-8"),
        element("meta", name="viewport", content="width=device-width, initial-scale=1"),
        element("title", f"{result.title}: reconciled readings"),
        element("link", rel="icon", href="data:,"),
        element("style", Markup(style)),
    )
    hatching = element(
        "svg", element("defs", HATCH), width="0", height="0", style="position:absolute", aria_hidden="true"
    )
    contents = element(
        "nav",
        element("ul", *(element("li", element("a", title, href=f"#{name}")) for name, title, _ in sections)),
        aria_label="Contents",
    )
    body = element(
        "body",
        element("a", "Skip to the findings", href="#verdict", class_="skip"),
        hatching,
        element(
            "div",
            element("header", element("h1", result.title), _verdict(result), contents),
            element(
                "main",
                *(
                    element(
                        "section",
                        element("h2", title, id=f"{name}-heading"),
                        part,
                        id=name,
                        aria_labelledby=f"{name}-heading",
                    )
                    for name, title, part in sections
                ),
            ),
            _footer(result),
            class_="wrap",
        ),
        element("script", Markup(_asset("page.js"))),
    )
    return "<!DOCTYPE html>\n" + element("html", head, body, lang="en") + "\n"


def _verdict(result: Result) -> Markup:
    words = [result.words[i] for i in range(result.size) if i not in result.table.failed]
    word = next((w for w in _WORST if w in words), "cannot tell")
    text = verdict_line(result)
    said = word if result.size == 1 else _of_many(words, word, result.size)
    return element(
        "div",
        element("span", MARKS[word], class_="sign", aria_hidden="true"),
        element("p", element("span", said[0].upper() + said[1:], class_="word"), text),
        class_=f"verdict {_CLASSES[word]}",
        id="verdict",
    )


def _of_many(words: Sequence[str], word: str, size: int) -> str:
    """The worst word of many snapshots as a headline."""
    count = words.count(word)
    if count == size:
        return f"all snapshots: {word}"
    return (
        f"{count} of {size} {'is' if count == 1 else 'are'} to watch"
        if word == "watch"
        else (f"{count} of {size} {'does' if count == 1 else 'do'} not agree" if word == "does not agree" else word)
    )


def _footer(result: Result) -> Markup:
    p = result.provenance
    stamped = f"Made by {p.get('program', 'reconcile-flows')}. " if p else ""
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
