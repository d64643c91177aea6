"""One self-contained page: everything that was found, readable without script, without network, and in print."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Literal

from ..errors import InputError, Problem
from . import figures
from .files import write_whole
from .markup import Markup, element, join
from .page_assumptions import assumptions
from .page_document import document, verdict_box
from .page_end import appendix, figures_of_knowledge, typical, unknowable
from .page_log import log_section
from .page_snapshot import explanations_part, snapshot_parts
from .page_snapshots import BYTES_OF_A_ROW, MOST_BYTES, one_at_a_time, over_time, overview, together
from .words import verdict_line

if TYPE_CHECKING:
    from ..hookspecs import Section
    from ..results import Result
    from ..run import Case
    from ..trajectory import Trajectory

__all__ = ["figures_of", "render_page", "write_figures", "write_page"]

MOST_SNAPSHOTS = 20_000

_WORST = ("does not agree", "watch", "cannot tell", "agrees")


def write_page(result: Result | Trajectory, path: str | Path, *, case: Case | None = None) -> Path:
    """Write the page of a result.

    Parameters
    ----------
    result : Result or Trajectory
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
                f"{result.size} {_noun(result)} are too many for a page of at most {MOST_SNAPSHOTS}",
                "make a page of a part of them, or of windows of them",
            )
        )
    target = Path(path)
    write_whole(target, render_page(result, case=case).encode())
    return target


def render_page(result: Result | Trajectory, *, case: Case | None = None) -> str:
    """Render the page of a result; the same result gives the same text.

    Parameters
    ----------
    result : Result or Trajectory
    case : Case, optional
        See `write_page`.

    Returns
    -------
    str
        A whole HTML document.
    """
    from ..trajectory import Trajectory

    if isinstance(result, Trajectory):
        from .page_trajectory import page_of_trajectory

        return page_of_trajectory(result)
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
    return document(result.title, _verdict(result), sections, result.provenance)


def figures_of(
    result: Result | Trajectory, case: Case | None = None, snapshot: int | None = None
) -> dict[str, figures.Figure]:
    """Every figure that has something to show, by its name.

    Parameters
    ----------
    result : Result or Trajectory
    case : Case, optional
        With it, meters that would tell suspects apart are drawn, too.
    snapshot : int, optional
        Counted from 0; the one that stands for the network when left out.

    Returns
    -------
    dict of str to Figure
    """
    from ..trajectory import Trajectory

    if isinstance(result, Trajectory):
        from .page_trajectory import figures_of_trajectory

        return {f.name: f for f in figures_of_trajectory(result)}
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
    result: Result | Trajectory, folder: str | Path, suffix: Literal["svg", "png"], *, case: Case | None = None
) -> list[Path]:
    """Write every figure into a folder.

    Parameters
    ----------
    result : Result or Trajectory
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


def _noun(result: Result | Trajectory) -> str:
    from ..trajectory import Trajectory

    return "windows" if isinstance(result, Trajectory) else "snapshots"


def _sections_of_plugins(result: Result, case: Case | None) -> Sequence[Section]:
    if case is None:
        return ()
    return [s for _, offered in case.plugins.each("reconcile_sections", result=result) for s in offered or ()]


def _plugin(section: Section) -> Markup:
    return element("div", *(element("p", part) for part in section.text.split("\n\n")), class_="plugin")


def _verdict(result: Result) -> Markup:
    words = [result.words[i] for i in range(result.size) if i not in result.table.failed]
    word = next((w for w in _WORST if w in words), "cannot tell")
    text = verdict_line(result)
    said = word if result.size == 1 else _of_many(words, word, result.size)
    return verdict_box(word, said, text)


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
