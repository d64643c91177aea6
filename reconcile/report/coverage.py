"""What a set of meters can show, as text."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from .layout import table, to_ascii, wrap
from .numbers import plain
from .words import percent

if TYPE_CHECKING:
    from ..coverage import Coverage, CoverageLine

__all__ = ["render_coverage"]


def render_coverage(found: Coverage, *, ascii_only: bool = False) -> str:
    """Render a coverage as text of at most 100 columns.

    Parameters
    ----------
    found : Coverage
    ascii_only : bool
        For terminals that cannot show more.

    Returns
    -------
    str
    """
    out = [found.title, ""]
    if found.checks == 0:
        out.append("No check possible: the balances leave nothing to compare, so no fault would be noticed.")
    else:
        one = found.checks == 1
        out.append(f"{found.checks} independent {'check' if one else 'checks'}:")
        out += [f"  {c}" for c in found.checks_in_words]
    if found.dependent:
        out += ["", "Balances that others imply (true, but no further check):", *(f"  {d}" for d in found.dependent)]
    readings = [x for x in found.lines if not math.isnan(x.share)]
    faults = [x for x in found.lines if math.isnan(x.share)]
    out += ["", _readings(readings)]
    out.append(
        wrap(
            f"smallest: bias that is noticed with {100 * found.power:g} % chance when {100 * found.level:g} % false "
            "alarms are taken and only this reading is asked for; of all: the same when every reading is asked for; "
            "named: chance that a fault of the smallest size is ranked first, it or one that looks exactly like it."
        )
    )
    if faults:
        rows = [(x.name, x.unit, _size(x.smallest), _size(x.smallest_of_all), _chance(x.named)) for x in faults]
        out += ["", table(("POSSIBLE FAULT", "unit", "smallest", "of all", "named"), rows, left=(0, 1))]
    if found.unread:
        unread = [
            (x.name, x.unit, plain(x.sigma, x.sigma), x.klass + (f": {x.reason}" if x.reason else ""))
            for x in found.unread
        ]
        out += ["", table(("NOT READ", "unit", "±", ""), unread, left=(0, 1, 3))]
    out += _notes(found, readings)
    text = "\n".join(out).rstrip() + "\n"
    return to_ascii(text) if ascii_only else text


def _readings(lines: list[CoverageLine]) -> str:
    rows = []
    for x in lines:
        relative = (
            f"{100 * x.smallest / abs(x.value):.1f} %" if x.value and math.isfinite(x.smallest / x.value) else "-"
        )
        rows.append(
            (
                x.item,
                x.unit,
                plain(x.sigma_before, x.sigma_before),
                plain(x.sigma_after, x.sigma_after),
                f"{x.share:.3f}",
                _size(x.smallest),
                relative,
                _size(x.smallest_of_all),
                _chance(x.named),
                "checked" if x.share > 0 else "not checked",
            )
        )
    header = ("READING", "unit", "±before", "±after", "checked", "smallest", "of value", "of all", "named", "")
    return table(header, rows, left=(0, 1, 9))


def _size(value: float) -> str:
    if not math.isfinite(value):
        return "never"
    text = f"{value:#.3g}"
    return f"{value:.3g}" if "e" in text else text.removesuffix(".")


def _chance(named: float) -> str:
    return percent(named) if math.isfinite(named) else "-"


def _notes(found: Coverage, readings: list[CoverageLine]) -> list[str]:
    out: list[str] = []
    for x in readings:
        if x.share == 0:
            would = f" Reading {_any_of(x.needs)} would change that." if x.needs else ""
            out.append(wrap(f"Nothing in this network would notice an error of {x.item}.{would}"))
    for v in found.unread:
        if v.klass == "cannot be calculated" and v.needs:
            out.append(wrap(f"{v.name} could be calculated if {_any_of(v.needs)} were read."))
    if out:
        out = ["", "WHAT CANNOT BE KNOWN", *out]
    if found.classes:
        out += ["", "CANNOT BE TOLD APART (whatever the readings are)", *(wrap(" = ".join(c)) for c in found.classes)]
    if found.near:
        rows = [(f"{n.first} and {n.second}", f"{n.correlation:+.2f}") for n in found.near[:12]]
        out += ["", table(("HARD TO TELL APART", "correlation"), rows)]
    return out


def _any_of(sets: tuple[tuple[str, ...], ...]) -> str:
    return ", or ".join(" and ".join(s) for s in sets)
