"""The verdict and its tables for a terminal."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from ..mixups import mixups_of
from ..refit import figures_if
from .campaign import from_the_log, last_lines, not_simply_read, verdict_line_of, why_not
from .history import history_section
from .layout import table, to_ascii, wrap
from .numbers import plain, reading_numbers, signed
from .words import (
    MARKS,
    alternative_name,
    explanations_in_words,
    p_value,
    percent,
    remarks_on_explanations,
    smearing_in_words,
    verdict_line,
    verdict_sentences,
)

if TYPE_CHECKING:
    from ..figures import FigureValue
    from ..results import Result
    from ..snapshot import Snapshot
    from ..snapshot_lines import VariableLine

__all__ = ["figures_granted", "render"]

MANY = 12


def render(result: Result, *, snapshot: int | None = None, ascii_only: bool = False) -> str:
    """Render a result as text of at most 100 columns.

    Parameters
    ----------
    result : Result
    snapshot : int, optional
        Show this one in detail, counted from 0.
    ascii_only : bool
        For terminals that cannot show more.

    Returns
    -------
    str
    """
    parts = [result.title, ""]
    if result.size > 1 and snapshot is None:
        parts += [wrap(verdict_line(result), ""), "", _many(result)]
        shown, why = _shown_of_many(result)
        if shown is not None:
            parts += ["", f"{why}, {result.labels[shown]}:", "", *_detail(result, shown)]
        parts += history_section(result.history) if result.history.enough else []
    else:
        index = snapshot or 0
        if index in result.table.failed:
            parts.append(wrap(verdict_line_of(result, index), ""))
        else:
            parts += _detail(result, index)
    parts += from_the_log(result, snapshot)
    parts += _closing(result)
    text = "\n".join(parts).rstrip() + "\n"
    return to_ascii(text) if ascii_only else text


def _shown_of_many(result: Result) -> tuple[int | None, str]:
    """The snapshot of many that is shown in detail, and why that one."""
    for word, why in (("does not agree", "The first that does not agree"), ("watch", "The first to watch")):
        found = [i for i, w in enumerate(result.words) if w == word and i not in result.table.failed]
        if found:
            return found[0], why
    return None, ""


def _many(result: Result) -> str:
    rows = []
    for i in range(result.size):
        if i in result.table.failed:
            rows.append((result.labels[i], "", "", "", "", why_not(result, i)))
            continue
        word = result.words[i]
        rows.append(
            (
                result.labels[i],
                f"{result.objective[i]:.2f}",
                str(result.checks[i]),
                plain(result.limit[i], 0.01),
                p_value(result.p_value[i]),
                f"{MARKS[word]} {word}",
            )
        )
    if len(rows) > 2 * MANY:
        skipped = len(rows) - 2 * MANY
        rows = [*rows[:MANY], (f"... {skipped} more", "", "", "", "", ""), *rows[-MANY:]]
    return table(("SNAPSHOT", "χ²", "checks", "limit", "p", ""), rows, left=(0, 5))


def _detail(result: Result, index: int) -> list[str]:
    s = result.snapshot(index)
    word = result.words[index]
    out = [wrap(f"{MARKS[word]} " + " ".join(verdict_sentences(s)), ""), "", _balances(s)]
    if math.isfinite(s.nodal.limit):
        out.append(wrap(f"A ratio is compared with {s.nodal.limit:.2f}, exact for {_tested(len(s.nodal_rows))}."))
    out += ["", _readings(s, not_simply_read(result, index))]
    out.append(
        wrap(
            f"z is compared with {s.meter_tests.limit:.2f}, exact for {_different(s.meter_tests.distinct)}. "
            "A large adjustment alone is no evidence against a meter: what moves most has the largest sigma."
        )
        if s.meter_tests.worst >= 0
        else ""
    )
    unread = s.unread
    if unread:
        out += ["", _unread(unread)]
    told = explanations_in_words(s)
    simple = mixups_of(result, index)[:3]
    if simple:
        out += ["", "SIMPLE MIX-UPS (put right, all readings agree; no size is fitted)"]
        out += [wrap(f"{m.words}: leaves χ² {m.left:.2f}, limit {m.limit:.2f}.") for m in simple]
    if told:
        out += ["", "EXPLANATIONS"]
        for i, lines in enumerate(told, 1):
            out.append(wrap(lines[0], "     ").replace("     ", f"  {i}. ", 1))
            out += [wrap(line, "     ") for line in lines[1:]]
        out += [wrap(remark) for remark in remarks_on_explanations(s)]
        out += [wrap(sentence) for sentence in smearing_in_words(result, index)]
    figures = result.figure_values(index)
    if figures:
        out += ["", _figures(figures)]
        granted = figures_granted(result, index)
        if granted:
            out.append(wrap("These hold if nothing is wrong. Granting an explanation instead:"))
            out.append(table(("FIGURE", "value", "±", "granting"), granted, left=(0, 3)))
    return out


def figures_granted(result: Result, index: int) -> list[tuple[str, str, str, str]]:
    """Figures with each explanation granted; explanations that give the same are told in one line."""
    told: dict[tuple[str, str, str], list[str]] = {}
    for alternative, values in figures_if(result, index):
        for f in values:
            key = (f.name, plain(f.value, f.sigma), plain(f.sigma, f.sigma))
            told.setdefault(key, []).append(alternative_name(alternative))
    order = list(result.figures)
    rows = sorted(told.items(), key=lambda row: order.index(row[0][0]))
    return [(*key, " or ".join(names)) for key, names in rows]


def _different(tests: int) -> str:
    return "one test" if tests == 1 else f"the {tests} different tests of this network"


def _tested(count: int) -> str:
    return "one balance" if count == 1 else f"the {count} balances that can be formed from readings"


def _balances(s: Snapshot) -> str:
    rows = []
    for b in s.balances:
        if math.isfinite(b.before):
            ratio = signed(b.ratio, 0.1) if math.isfinite(b.ratio) else "-"
            rows.append(
                (
                    b.name,
                    b.unit,
                    plain(b.inflow, b.spread),
                    plain(b.outflow, b.spread),
                    signed(b.before, b.spread),
                    plain(b.spread, b.spread),
                    ratio,
                    "closed" if abs(b.after) <= 1e-9 * max(b.scale, 1e-300) else f"{b.after:.1e}",
                )
            )
        else:
            rows.append(
                (
                    b.name,
                    b.unit,
                    "",
                    "",
                    "not all read",
                    "",
                    "",
                    "closed" if abs(b.after) <= 1e-9 * max(b.scale, 1e-300) else f"{b.after:.1e}",
                )
            )
    return table(("BALANCE", "unit", "in", "out", "closure", "spread", "ratio", "after"), rows, left=(0, 1))


def _word(word: str, mark: str) -> str:
    """Word for a reading, and how it came about where nobody read it; room is scarce."""
    return word if not mark else mark if word == "sound so far" else f"{word}, {mark}"


def _readings(s: Snapshot, marks: Mapping[str, str]) -> str:
    rows = []
    for r in s.readings:
        rows.append(
            (
                r.tag.removeprefix("known:"),
                r.unit,
                *reading_numbers(r),
                f"{r.share:.2f}",
                signed(r.z, 0.1),
                _word(r.word, marks.get(r.tag, "")),
            )
        )
    header = ("READING", "unit", "read", "adjusted", "±before", "±after", "moved", "in ±", "checked", "z", "")
    return table(header, rows, left=(0, 1, 10))


def _unread(unread: Sequence[VariableLine]) -> str:
    rows = [
        (
            v.name,
            v.unit,
            plain(v.adjusted, v.sigma),
            plain(v.sigma, v.sigma),
            v.klass + (f": {v.reason}" if v.reason else ""),
        )
        for v in unread
    ]
    return table(("NOT READ", "unit", "value", "±", ""), rows, left=(0, 1, 4))


def _figures(figures: Sequence[FigureValue]) -> str:
    rows = [
        (
            f.name,
            plain(f.value, f.sigma),
            plain(f.sigma, f.sigma),
            plain(f.raw, f.raw_sigma),
            plain(f.raw_sigma, f.raw_sigma),
            f.reason or ", ".join(f"{k} {percent(v)}" for k, v in list(f.shares.items())[:3]),
        )
        for f in figures
    ]
    return table(("FIGURE", "value", "±", "raw", "±raw", "uncertainty from"), rows, left=(0, 5))


def _closing(result: Result) -> list[str]:
    decided = [wrap(f"{result.labels[i]}: {d.words}") for i, d in result.decisions.items()]
    head = ["", "DECIDED", *decided] if decided else []
    return [*head, *last_lines(result.excluded, result.notices, result.cautions)]
