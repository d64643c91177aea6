"""What many snapshots say together, in words."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np

from ..accounts import SizedFault
from ..diagnose.lookalike import PARALLEL
from .layout import table, to_ascii, wrap
from .levels import levels_in_words
from .numbers import plain, signed
from .sigmas import audit_in_words
from .words import fault_phrase, named_in_short, p_value

if TYPE_CHECKING:
    from ..adjust.robust import Loss
    from ..history import History
    from ..over_time.one_sided import OneSided
    from ..over_time.tracks import Drift, Rival, Track

__all__ = ["drift_in_words", "history_section", "render_history"]

MOST_LISTED = 5
NAMES: dict[Loss, str] = {"huber": "Huber", "welsch": "Welsch", "hampel": "Hampel"}


def render_history(history: History, *, ascii_only: bool = False) -> str:
    """Render all of it as text of at most 100 columns.

    Parameters
    ----------
    history : History
    ascii_only : bool
        For terminals that cannot show more.

    Returns
    -------
    str
    """
    text = "\n".join([history.result.title, *history_section(history)]).rstrip() + "\n"
    return to_ascii(text) if ascii_only else text


def history_section(history: History) -> list[str]:
    """Lines of the section, from an empty line on."""
    if not history.count:
        return ["", wrap("No snapshot has a check, so they say nothing together that each does not say alone.", "")]
    n = history.count
    head = f"OVER ALL {n} SNAPSHOTS" if n > 1 else "OVER THE ONE SNAPSHOT"
    left_out = history.result.size - n
    out = ["", head]
    if left_out:
        out.append(wrap(f"{left_out} more have no check or were not solved, and are left out here."))
    for lines in (
        _steady(history),
        _structural(history),
        _changes(history),
        levels_in_words(history),
        audit_in_words(history),
        _second_opinion(history),
    ):
        if lines:
            out += ["", *lines]
    return out


# ------------------------------------------------------------------ steady


def _steady(history: History) -> list[str]:
    s = history.steady
    test = (
        f"χ² {s.objective:.2f}, {s.checks} {'check' if s.checks == 1 else 'checks'}, limit {s.limit:.2f}, p {_p(s.p)}"
    )
    out = ["  Steady over all of them"]
    if s.agrees:
        out.append(wrap(f"Pooled, nothing steady shows ({test}).", "    "))
        near = [f for f in s.faults if f.kind == "bias" and math.isfinite(f.smallest)]
        if near:
            told = ", ".join(f"{f.name} {plain(f.smallest, f.smallest)} {f.unit}" for f in near)
            power = 100 * history.result.settings.power
            out.append(wrap(f"A steady error would be noticed (chance {power:.0f} %) from: {told}.", "    "))
    else:
        out.append(wrap(f"Pooled, something is off ({test}). " + " ".join(named_in_short(s.accounts)), "    "))
        if s.single is not None and not history.drifts:
            out.append(
                wrap(f"It is all in one snapshot: without {s.single} the pool agrees (χ² {s.without_it:.2f}).", "    ")
            )
        if history.drifts:
            out.append(wrap("It is not the same throughout, though: see the changes below.", "    "))
        elif history.levels.outcome == "scale":
            out.append(wrap("It is not the same at every flow, though: see the flow levels below.", "    "))
        best = s.accounts.standing[0].alternatives if s.accounts and s.accounts.standing else ()
        named = {f.candidate.name for a in best for f in a.faults}
        small = [f.name for f in s.faults if f.name in named and f.kind == "bias" and f.sigmas < 1]
        if small:
            out.append(
                wrap(
                    f"That is less than one sigma of {' and '.join(small)}. Where a sigma includes a calibration error that "
                    "stays the same in all snapshots, a steady error of that size is what it allows.",
                    "    ",
                )
            )
    if s.contrast_checks and s.contrast_p < 0.01:
        out.append(
            wrap(
                f"Snapshots contradict each other (χ² {s.contrast:.2f}, "
                f"{s.contrast_checks} checks, p {_p(s.contrast_p)}) in a way that no steady fault explains.",
                "    ",
            )
        )
    if history.stretches:
        rows = [
            (f"{t.first} to {t.last}", str(t.count), f"{t.objective:.2f}", str(t.checks), f"{t.limit:.2f}", _p(t.p),
             "off" if t.objective > t.limit else "agrees")
            for t in history.stretches
        ]  # fmt: skip
        out += ["", table(("POOLED", "snapshots", "χ²", "checks", "limit", "p", ""), rows, left=(0, 6))]
    return out


def _p(p: float) -> str:
    return "under 1e-300" if p == 0 else p_value(p)


def _structural(history: History) -> list[str]:
    return [wrap(one_sided_in_words(o, history)) for o in history.one_sided]


def one_sided_in_words(o: OneSided, history: History) -> str:
    """A balance that is off to one side in every record, and what that means."""
    side = "more goes in than comes out" if o.mean > 0 else "more comes out than goes in"
    where = f" at {o.node}" if o.node else ""
    digit = (o.high - o.low) / 10
    text = (
        f"{o.balance} is off to the same side in all {o.count} records that form it ({side}: mean {signed(o.mean, digit)}, from "
        f"{plain(o.low, digit)} to {plain(o.high, digit)} {o.unit})."
    )
    if o.structural:
        fits = f" {', '.join(o.faults)} would fit." if o.faults else ""
        return f"{text} Structural error (a missing stream or balance{where}), not one bad meter: no single meter, off by a constant or by a share, accounts for all records.{fits}"
    return (
        f"{text} Cannot tell a structural error (a missing stream or balance{where}) from one bad meter: "
        f"{', '.join(o.meters)} alone could do it too."
    )


# ------------------------------------------------------------------ changes


def _changes(history: History) -> list[str]:
    out = ["  Changes"]
    if not history.drifts:
        out.append(wrap(_no_change(history), "    "))
    for d in history.drifts:
        out += [wrap(line, "    ") for line in drift_in_words(d, history)]
    out += [wrap(line, "    ") for t in history.tracks if (line := _calibrations(t, history))]
    unplaced = _unplaced(history)
    if unplaced:
        out.append(wrap(unplaced, "    "))
    return out


def _no_change(history: History) -> str:
    if history.watch is None:
        return "No fault begins or grows."
    track, s = history.watch
    assert s.alarm is not None
    side = "upwards" if s.alarm == s.alarm_up else "downwards"
    shape = (
        " It cannot be told yet whether it grows or jumped." if s.shape == "open" else f" It looks like a {s.shape}."
    )
    tied = [r.name for r in history.alike(track)]
    name = " or ".join([track.name, *tied])
    return (
        f"Watch {name}: its cumulative sum alarmed at {_name(history, s.alarm)}, {side}, but a change since "
        f"{_name(history, s.onset)} takes only χ² {s.gain:.1f} off, and chance over all onsets and tracks would reach "
        f"{s.limit * s.excess:.1f}.{shape} Of many such sums one alarms by chance in about 930 snapshots."
    )


def _name(history: History, i: int) -> str:
    """Name of a snapshot; ``snapshot`` stands before a bare number."""
    label = history.labels[i]
    return f"snapshot {label}" if label.isdigit() else label


def drift_in_words(d: Drift, history: History) -> list[str]:
    """One change: what, since when, how sure, which shape, and what it could be instead."""
    s = d.stretch
    c = history.result.model.candidates[d.track.candidate]
    size = fault_phrase(SizedFault(c, s.size, s.sigma))
    text = f"{size} (± {plain(s.sigma, s.sigma)}) at {_name(history, s.last)}"
    if s.from_the_start:
        text += (
            ", from the first snapshot on"
            if s.latest == s.first
            else f", from the first to {_name(history, s.latest)} on"
        )
        text += "."
    else:
        text += f", since {_name(history, s.onset)} (95 %: {history.labels[s.earliest]} to {history.labels[s.latest]})."
    ahead = abs(s.ramp_gain - s.step_gain)
    if s.shape == "ramp":
        text += f" It grows, by {plain(abs(s.slope), s.slope_sigma)} ± {plain(s.slope_sigma, s.slope_sigma)} {c.unit} a snapshot: a jump fits worse by χ² {ahead:.1f}."
    elif s.shape == "step":
        text += (
            f" It {'stayed the same' if s.from_the_start else 'jumped'}: steady growth fits worse by χ² {ahead:.1f}."
        )
    else:
        text += f" Whether it grows or jumped cannot be told yet (the two differ by χ² {ahead:.1f}, and 3.84 is clear)."
    if s.alarm is not None:
        text += f" The cumulative sum alarmed at {_name(history, s.alarm)}"
        text += (
            "; at that moment growth could not yet be told from a jump."
            if s.open_at_alarm and s.shape != "open"
            else "."
        )
    out = [text]
    same = [r for r in d.rivals if abs(r.correlation) >= 1 - PARALLEL and not r.excluded]
    if same:
        told = ", or ".join(_rival_phrase(r, history) for r in same)
        out.append(f"Cannot tell it from: {told}; they look exactly alike in these readings.")
    groups: list[list[Rival]] = []
    for r in (r for r in d.rivals if r not in same):
        near = groups and abs(groups[-1][0].behind - r.behind) <= 1e-6 * (1 + abs(r.behind))
        if near and abs(abs(groups[-1][0].correlation) - abs(r.correlation)) <= 1e-9:
            groups[-1].append(r)
        else:
            groups.append([r])
    return out + [_rival(g, d, history) for g in groups[:MOST_LISTED]]


def _rival_phrase(r: Rival, history: History) -> str:
    c = next(c for c in history.result.model.candidates if c.name == r.name)
    return fault_phrase(SizedFault(c, r.size, r.sigma))


def _rival(tied: list[Rival], d: Drift, history: History) -> str:
    r = tied[0]
    told = ", or ".join(_rival_phrase(x, history) for x in tied)
    alike = f"signature correlation {r.correlation:+.2f}"
    word = (
        f"leaves χ² {r.behind:.1f} more and is rejected" if r.excluded else f"is not excluded (χ² {r.behind:.1f} more)"
    )
    if r.excluded and abs(r.correlation) >= 1 - PARALLEL:
        word += ", as it would not have ended with a calibration"
    parts = [
        f"{name} would open {' and '.join(balances)}"
        for name, balances in ((r.name, r.touches), (d.track.name, r.instead))
        if balances
    ]
    differ = f" What differs: {'; '.join(parts)}." if parts else ""
    return f"Rival: {told} ({alike}) {word}.{differ}"


def _calibrations(track: Track, history: History) -> str:
    if not track.calibrated:
        return ""
    places = ", ".join(_name(history, i) for i in track.calibrated)
    return f"{track.name} was calibrated: its track, and no other, begins anew at {places}."


def _unplaced(history: History) -> str:
    """Calibration dates that could not be set beside the snapshots."""
    spec = history.result.spec
    tags = [t for t, m in spec.meters.items() if m.options.get("calibrated")] if spec else []
    if not tags or history.timed:
        return ""
    return f"The snapshots have no time, so the calibration dates of {', '.join(tags)} are not used."


# ------------------------------------------------------------------ second opinion


def _second_opinion(history: History) -> list[str]:
    out = ["  Robust second opinion"]
    for loss in history.losses:
        name = NAMES[loss]
        o = history.second_opinion(loss)
        text = f"{name}: "
        count = int(o.differs.sum())
        if count == 0:
            text += "no value differs from the adjusted one by more than one sigma."
        else:
            size = np.nan_to_num(np.abs(o.difference))
            at, v = np.unravel_index(int(size.argmax()), size.shape)
            i = int(at)
            value = o.values[i, v]
            sigma = float(history.result.sigmas[i, v])
            least = value - o.difference[i, v] * sigma
            text += (
                f"values differ from least squares by more than one sigma in {count} of {history.count} snapshots, most in "
                f"{_name(history, i)}: {o.variables[v]} {plain(value, sigma)} instead of {plain(least, sigma)} "
                f"{o.units[v]} ({size.max():.1f} sigma)."
            )
            moved = np.nan_to_num(np.abs(o.pulled[i]))
            if moved.max(initial=0.0) > 0:
                text += f" There {history.result.tags[int(moved.argmax())]} has lost most of its pull."
        several = int((~o.unique).sum())
        if several:
            text += (
                f" In {several} of the snapshots other values fit as well: several readings share a gross error there."
            )
        if not o.optimal:
            bad = int(np.sum(o.violation > 1e-7))
            text += f" In {bad} snapshots the conditions of an optimum do not hold (off by up to {np.nanmax(o.violation):.1g} sigma)."
        out.append(wrap(text, "    "))
    if history.second_opinion("huber").linearised:
        out.append(
            wrap("Balances hold products: each estimate is that of one linearisation, at the adjusted values.", "    ")
        )
    return out
