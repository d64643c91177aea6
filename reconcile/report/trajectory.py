"""A sequence of windows for a terminal: verdict, inventories, explanations."""

from __future__ import annotations

import math
from types import SimpleNamespace
from typing import TYPE_CHECKING, Any

import numpy as np

from .campaign import last_lines
from .layout import table, to_ascii, wrap
from .numbers import plain, signed
from .words import (
    MARKS,
    Suspect,
    explanations_in_words,
    named_in_short,
    remarks_on_explanations,
    suspects_of,
    test_phrase,
)

if TYPE_CHECKING:
    from ..trajectory import Trajectory

__all__ = [
    "beyond_of_trajectory",
    "explanations_of_trajectory",
    "limits_of_trajectory",
    "meters_of_inventories",
    "render_trajectory",
    "suspects_of_trajectory",
    "verdict_of_trajectory",
]

MANY = 14


def _told(found: Trajectory) -> Any:
    """What the sentences of a snapshot read, for the whole sequence."""
    return SimpleNamespace(accounts=found.accounts, test=found.test)


def suspects_of_trajectory(found: Trajectory) -> tuple[Suspect, ...]:
    """Every fault that a standing explanation of the sequence names."""
    return suspects_of(_told(found))


def explanations_of_trajectory(found: Trajectory) -> tuple[list[list[str]], list[str]]:
    """Explanations of the sequence as lines, and the remarks on them; none where the readings agree."""
    if found.test.status != "disagrees":
        return [], []
    told = _told(found)
    return explanations_in_words(told), remarks_on_explanations(told)


def verdict_of_trajectory(found: Trajectory) -> str:
    """One paragraph: how many windows, readings and checks, whether they agree, and who is suspected."""
    given = int(np.isfinite(found.base[:, found.model.meters]).sum())
    head = f"{found.size} windows, {given} readings, {found.checks} checks: "
    if found.checks == 0:
        return head + "no check possible, since balances and inventories leave nothing to compare."
    if found.test.status == "disagrees":
        verb = "to watch" if found.word == "watch" else "do not agree"
        return " ".join([head + f"{verb} ({test_phrase(_told(found))}).", *named_in_short(found.accounts)])
    if found.test.status == "suspiciously good":
        return head + f"agree suspiciously well ({test_phrase(_told(found))}): the sigmas are probably too large."
    return head + f"agree within their sigmas ({test_phrase(_told(found))})."


def beyond_of_trajectory(found: Trajectory) -> str:
    """Inventories beyond the windows, at the end that is open; empty where they cannot be told."""
    if not found.outer:
        return ""
    beyond = "before the first window" if found.trajectory.at_end else "behind the last window"
    unit = {i.name: i.unit for i in found.trajectory.inventories.values()}
    text = ", ".join(f"{n} {plain(v, s)} ± {plain(s, s)} {unit[n]}" for n, (v, s) in found.outer.items())
    return f"{beyond}: {text}"


def limits_of_trajectory(found: Trajectory) -> list[str]:
    """What the readings of a sequence cannot show, and what was taken as the same throughout."""
    out = []
    unchecked = [
        tag
        for tag, i in zip(found.tags, found.model.meters, strict=True)
        if np.isfinite(found.base[:, i]).any() and not (found.share[:, i] > 0).any()
    ]
    if unchecked:
        out.append(f"Not checked by anything in any window: {', '.join(unchecked)}.")
    priors = [r.tag.removeprefix("known:") for r in found.model.readings if r.kind == "prior"]
    stays = [n for n in priors if n not in found.trajectory.varying]
    if stays:
        out.append(f"Taken as the same in all windows: {', '.join(stays)}.")
    if not found.model.shared:
        out.append(
            "Errors are taken as independent from window to window. What stays the same, such as a calibration, belongs "
            "under trajectory: constant_errors."
        )
    return out


def meters_of_inventories(found: Trajectory) -> dict[str, tuple[int, int]]:
    """First meter that reads each inventory alone: its place among the meters and among the readings."""
    names = {i.name for i in found.trajectory.inventories.values()}
    out: dict[str, tuple[int, int]] = {}
    for j, i in enumerate(found.model.meters):
        reads = found.model.readings[i].reads
        if len(reads) == 1 and reads[0][0] in names:
            out.setdefault(reads[0][0], (j, int(i)))
    return out


def render_trajectory(found: Trajectory, *, ascii_only: bool = False) -> str:
    """Render a sequence as text of at most 100 columns.

    Parameters
    ----------
    found : Trajectory
    ascii_only : bool
        For terminals that cannot show more.

    Returns
    -------
    str
    """
    out = [found.title, "", wrap(f"{MARKS.get(found.word, '')} {verdict_of_trajectory(found)}".strip(), "")]
    at = "end" if found.trajectory.at_end else "start"
    out += ["", f"  Inventories at the {at} of each window:", "", _inventories(found)]
    beyond = beyond_of_trajectory(found)
    if beyond:
        out += ["", wrap(beyond)]
    told, remarks = explanations_of_trajectory(found)
    if told:
        out += ["", "EXPLANATIONS", *(wrap(line, "    ") for lines in told for line in lines)]
    out += [wrap(line) for line in remarks]
    out += [line for sentence in limits_of_trajectory(found) for line in ("", wrap(sentence))]
    out += last_lines(found.excluded, tuple(found.notices), tuple(found.cautions))
    text = "\n".join(out) + "\n"
    return to_ascii(text) if ascii_only else text


def _inventories(found: Trajectory) -> str:
    """Each inventory of the first and last windows: read (where one meter reads it), adjusted, sigma, test value."""
    meter_of = meters_of_inventories(found)
    shown = range(found.size)
    first = [*shown] if found.size <= MANY else [*shown][: MANY // 2]
    last = [] if found.size <= MANY else [*shown][-MANY // 2 :]
    rows = []
    for inventory in found.trajectory.inventories.values():
        place = found.variables.index(inventory.name)
        for t in (*first, None, *last) if last else first:
            if t is None:
                rows.append(("...", "", "", "", "", "", ""))
                continue
            value, sigma = float(found.adjusted[t, place]), float(found.sigmas[t, place])
            read, z = math.nan, math.nan
            if inventory.name in meter_of:
                _, i = meter_of[inventory.name]
                read, z = float(found.base[t, i]), float(found.z[t, i])
            rows.append(
                (
                    found.labels[t], inventory.name, inventory.unit, plain(read, sigma), plain(value, sigma),
                    plain(sigma, sigma), signed(z, 0.05),
                )
            )  # fmt: skip
    return table(("WINDOW", "inventory", "unit", "read", "adjusted", "sigma", "z"), rows, left=(0, 1, 2))
