"""Rankings of meters and rehearsals, as text."""

from __future__ import annotations

from typing import TYPE_CHECKING

from .layout import table, to_ascii, wrap

if TYPE_CHECKING:
    from ..diagnose.rehearse import Rate
    from ..planner import Placements, Rehearsed

__all__ = ["render_placements", "render_rehearsal"]


def render_placements(found: Placements, *, most: int = 20, ascii_only: bool = False) -> str:
    """Render a ranking; a meter that changes nothing is said to have no effect."""
    rows = []
    for i, p in enumerate(found.ranked[:most], 1):
        names = " and ".join(found.offers[m].variable for m in p.meters)
        sigmas = ", ".join(
            f"{found.offers[m].sigma:.3g} {found.offers[m].unit} ({found.offers[m].origin})" for m in p.meters
        )
        after = f"{p.after:.3g}" if p.effect else "no effect"
        rows.append(
            (str(i), names, _number(p.before), after, f"{p.price:g}" if p.price else "-", str(p.checks), sigmas)
        )
    unit = f" ({found.unit})" if found.unit else ""
    out = [
        f"Goal: {found.goal}. Shown: {found.measure}{unit}, now and with the added meter.",
        "",
        table(("", "A METER ON", "now", "then", "price", "checks", "its sigma"), rows, left=(1, 6), keep=4),
    ]
    if len(found.ranked) > most:
        out.append(f"  ... {len(found.ranked) - most} more")
    text = "\n".join(out) + "\n"
    return to_ascii(text) if ascii_only else text


def _number(value: float) -> str:
    return "never" if value == float("inf") else f"{value:.3g}"


def render_rehearsal(found: Rehearsed, *, ascii_only: bool = False) -> str:
    """Render how often each injected fault is noticed and named, and what is named instead."""
    alarm = found.found.false_alarm
    rows = []
    for j, name in enumerate(found.names):
        counts = found.found.confusion[j, :-1]
        order = [i for i in counts.argsort()[::-1] if counts[i] > 0 and found.candidates[i] != name][:3]
        total = max(int(counts.sum()), 1)
        instead = ", ".join(f"{found.candidates[i]} {100 * counts[i] / total:.0f} %" for i in order)
        rows.append(
            (
                name, f"{found.sizes[j]:.3g} {found.units[j]}", _rate(found.found.noticed[j]),
                _rate(found.found.named[j]), _rate(found.found.in_class[j]), instead,
            )
        )  # fmt: skip
    out = [
        wrap(
            f"Each fault was injected {found.trials} times (seed {found.seed}). Without any fault the test of all "
            f"readings alarmed in {_rate(alarm)} (95 %: {100 * alarm.low:.1f} to {100 * alarm.high:.1f} %).",
            "",
        ),
        "",
        table(("INJECTED", "size", "noticed", "named", "or its twin", "named instead"), rows, left=(0, 5)),
        wrap("named: ranked first by the largest test value; or its twin: it, or a fault that looks exactly like it."),
    ]
    text = "\n".join(out) + "\n"
    return to_ascii(text) if ascii_only else text


def _rate(rate: Rate) -> str:
    return f"{100 * rate.value:.1f} %"
