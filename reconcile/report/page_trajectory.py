"""The page of windows that are tied by inventories: one verdict for all of them, then what each holds and passes."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from .figures import Figure
from .figures.windows import derived_over_windows, evidence_of_windows, inventories, readings_over_windows
from .markup import Markup, element, join
from .numbers import plain, signed
from .page_assumptions import assumptions_of_any
from .page_document import document, verdict_box
from .page_end import appendix_of_any
from .page_snapshot import figure_part, ranked_suspects, told_list
from .symbols import symbol_of
from .tables import html_table
from .trajectory import (
    beyond_of_trajectory,
    explanations_of_trajectory,
    limits_of_trajectory,
    meters_of_inventories,
    suspects_of_trajectory,
    verdict_of_trajectory,
)
from .words import p_value

if TYPE_CHECKING:
    from ..trajectory import Trajectory

__all__ = ["figures_of_trajectory", "page_of_trajectory"]

MOST_CELLS, UNFOLDED, MOST_NAMED = 12_000, 40, 12
"""Numbers that the table of all windows may hold; rows of it that stand unfolded; names in one sentence."""


def page_of_trajectory(found: Trajectory) -> str:
    """Render the page of a sequence of windows; the same sequence gives the same text.

    Parameters
    ----------
    found : Trajectory

    Returns
    -------
    str
        A whole HTML document.
    """
    sections = [
        ("inventories", "Inventories", _inventories(found)),
        ("readings", "Readings", _readings(found)),
        ("explanations", "Explanations", _explanations(found)),
        ("windows", "All windows", _windows(found)),
        ("unknown", "What cannot be known", _unknown(found)),
        ("assumptions", "Assumptions", _assumptions(found)),
        ("appendix", "Appendix for auditors", appendix_of_any(found)),
    ]
    verdict = verdict_box(found.word, found.word, verdict_of_trajectory(found))
    return document(found.title, verdict, sections, found.provenance)


def figures_of_trajectory(found: Trajectory) -> list[Figure]:
    """Every figure of a sequence that has something to show."""
    evidence = evidence_of_windows(found)
    drawn = [*inventories(found), *readings_over_windows(found), *derived_over_windows(found)]
    return [*drawn, *([evidence] if evidence is not None else [])]


def _inventories(found: Trajectory) -> Markup:
    at = "end" if found.trajectory.at_end else "start"
    beyond = beyond_of_trajectory(found)
    read_by = meters_of_inventories(found)
    rows = []
    for inventory in found.trajectory.inventories.values():
        value, sigma = found.inventory(inventory.name)
        spread = [s for s in sigma if math.isfinite(s)]
        rows.append(
            (
                inventory.name,
                found.tags[read_by[inventory.name][0]] if inventory.name in read_by else "nothing",
                inventory.unit,
                plain(value[0], sigma[0]),
                plain(sigma[0], sigma[0]),
                plain(value[-1], sigma[-1]),
                plain(sigma[-1], sigma[-1]),
                plain(max(spread), max(spread)) if spread else "-",
            )
        )
    header = ("inventory", "read by", "unit", "first window", "±", "last window", "±", "largest ±")
    table = html_table(
        f"What nodes hold at the {at} of a window, adjusted", header, rows, name="inventories-table", left=(0, 1, 2)
    )
    return join(
        table,
        element("p", f"{beyond[0].upper()}{beyond[1:]}.") if beyond else None,
        *(figure_part(f) for f in inventories(found)),
    )


def _readings(found: Trajectory) -> Markup:
    """Meters over the whole sequence: how far they were moved, how well they are checked, where they stand out."""
    named = {s.item: "suspect" if not s.tied_with else "tied" for s in suspects_of_trajectory(found)}
    frame = found.to_frame()
    rows, marked = [], []
    for tag, i in zip(found.tags, found.model.meters, strict=True):
        r = found.model.readings[i]
        mine = frame[frame["meter"] == tag]
        given = np.isfinite(found.base[:, i])
        reads = (tag, " + ".join(n for n, _ in r.reads), r.unit, str(int(given.sum())))
        if not given.any():
            rows.append((*reads, "-", "-", "-", "-", "-", f"{symbol_of('no reading')} no reading", "-"))
            continue
        sigma = float(np.nanmedian(mine["sigma_before"].to_numpy(dtype=float)[given]))
        moved = float(np.nanmean(mine["adjustment"].to_numpy(dtype=float)[given]))
        share, z = found.share[given, i], found.z[:, i]
        checked = bool((share > 0).any())
        worst = int(np.nanargmax(np.abs(z))) if np.isfinite(z).any() else -1
        beyond = int((np.abs(z[np.isfinite(z)]) > found.z_limit).sum())
        word = named.get(tag) or ("sound so far" if checked else "not checked")
        if word in ("suspect", "tied") or beyond:
            marked.append(len(rows))
        rows.append(
            (
                *reads,
                plain(sigma, sigma),
                signed(moved / sigma, 0.1),
                f"{100 * float(share.mean()):.0f} %",
                signed(float(z[worst]), 0.1) if worst >= 0 else "-",
                str(beyond) if checked else "-",
                f"{symbol_of(word)} {word}",
                found.labels[worst] if worst >= 0 else "-",
            )
        )
    header = (
        "meter", "reads", "unit", "readings", "±", "moved", "checked", "z", "beyond", "word", "z largest in",
    )  # fmt: skip
    count = int(np.isfinite(found.z[:, found.model.meters]).sum())
    note = (
        "± is one sigma of a reading, moved the mean adjustment in these, checked the mean share of an error that would "
        f"show, z the largest test value of a single reading. The largest of all {count} is compared with "
        f"{found.z_limit:.2f} (Šidák); beyond counts those beyond it. What lasts, such as a bias, moves many readings a "
        "little: the explanations weigh it over the whole sequence."
        if math.isfinite(found.z_limit)
        else "No reading is checked by others."
    )
    table = html_table(
        "Meters over the sequence", header, rows, name="meters-table", left=(0, 1, 2, 9, 10), sortable=True, note=note,
        marked=marked,
    )  # fmt: skip
    drawn = [*readings_over_windows(found), *derived_over_windows(found)]
    return join(table, *(figure_part(f) for f in drawn))


def _explanations(found: Trajectory) -> Markup:
    told, remarks = explanations_of_trajectory(found)
    t = found.test
    if told:
        first = told_list(told)
    elif t.status == "disagrees":
        first = element("p", "No set of possible faults that was tried accounts for the readings.")
    elif found.checks == 0:
        first = element("p", "Nothing can be said: there is no check.")
    else:
        first = element("p", "None is needed: the readings agree within their sigmas.")
    return join(
        first, ranked_suspects(suspects_of_trajectory(found)), *(element("p", remark) for remark in remarks)
    )  # fmt: skip


def _windows(found: Trajectory) -> Markup:
    """Evidence window by window, and every adjusted value with its sigma."""
    own = {i.name for i in found.trajectory.inventories.values()}
    order = sorted(range(len(found.variables)), key=lambda j: found.variables[j] not in own)
    objective, checks, p = found.by_window
    header = ["window", "seconds", "χ²", "checks", "p"]
    for j in order:
        header += [f"{found.variables[j]}, {found.units[j]}", "±"]
    most = max(1, MOST_CELLS // len(header))
    rows = []
    for t in range(min(found.size, most)):
        cells = [found.labels[t], f"{found.lengths[t]:g}", f"{objective[t]:.2f}", str(int(checks[t])), p_value(p[t])]
        for j in order:
            value, sigma = float(found.adjusted[t, j]), float(found.sigmas[t, j])
            cells += [plain(value, sigma), plain(sigma, sigma)]
        rows.append(cells)
    note = (
        "χ², checks and p of a window are of the checks that it completed; all of them together make the verdict. "
        "Values are adjusted, ± is one sigma."
    )
    if found.size > most:
        note += f" {found.size - most} windows more; adjusted.csv and sigmas.csv of --out have all."
    table = html_table("All windows, adjusted", header, rows, name="windows-table", note=note)
    if len(rows) > UNFOLDED:
        table = element("details", element("summary", f"Table of {len(rows)} windows"), table)
    test = found.test
    whole = (
        f"All together: χ² {test.objective:.2f} from {found.checks} checks, limit {test.limit:.2f} at "
        f"{100 * test.level:g} %, p {p_value(test.p)}."
        if found.checks
        else "There is no check in any window."
    )
    return join(element("p", whole), figure_part(evidence_of_windows(found)), table)


def _unknown(found: Trajectory) -> Markup:
    known = np.isfinite(found.adjusted)
    never = [n for n, k in zip(found.variables, known.T, strict=True) if not k.any()]
    some = [
        f"{n} ({int((~k).sum())} windows)"
        for n, k in zip(found.variables, known.T, strict=True)
        if 0 < k.sum() < k.size
    ]
    sentences = []
    if never:
        sentences.append(f"Cannot be calculated in any window: {_few(never)}.")
    if some:
        sentences.append(f"Cannot be calculated in some windows: {_few(some)}.")
    sentences += limits_of_trajectory(found)
    if not sentences:
        return element(
            "p", "Every reading is checked by others in some window, and every variable can be calculated in all."
        )
    return element("ul", *(element("li", s) for s in sentences))


def _few(names: list[str]) -> str:
    more = len(names) - MOST_NAMED
    return ", ".join(names[:MOST_NAMED]) + (f" and {more} more" if more > 0 else "")


def _assumptions(found: Trajectory) -> Markup:
    used = {}
    for r, sigma in zip(found.model.readings, found.solution.sigma.T, strict=True):
        finite = sigma[np.isfinite(sigma)]
        used[r.tag] = float(np.median(finite)) / abs(r.factor) if finite.size else math.nan
    at = "end" if found.trajectory.at_end else "start"
    more = [f"Inventories are read at the {at} of each window; flows are means over it."]
    lengths = sorted({f"{v:g}" for v in found.lengths}, key=float)
    said = f"{lengths[0]} s" if len(lengths) == 1 else f"{lengths[0]} to {lengths[-1]} s"
    more.append(f"{found.size} windows of {said}.")
    return assumptions_of_any(found, used, more=more)
