"""Constant or proportional, in words."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

from ..accounts import SizedFault
from .layout import wrap
from .numbers import plain, signed
from .words import fault_phrase

if TYPE_CHECKING:
    from ..history import History
    from ..over_time.levels import FlowLevels, LevelModel

__all__ = ["level_sentences", "levels_in_words"]

NOISY = 0.02
NEEDED = 1.959963984540054


def levels_in_words(history: History) -> list[str]:
    """Lines on flow levels; none where nothing is wrong."""
    sentences = level_sentences(history)
    return ["  Flow levels", *(wrap(s, "    ") for s in sentences)] if sentences else []


def level_sentences(history: History) -> list[str]:
    """Sentences on flow levels; none where nothing is wrong."""
    f = history.levels
    if f.outcome == "nothing" or not (f.rejected or f.classes) or (history.drifts and f.outcome != "neither"):
        return []
    if f.outcome == "neither":
        if history.drifts or history.steady.agrees or history.steady.single is not None:
            return []
        best = f.rejected[0]
        text = (
            "Neither a constant error nor one of scale of any one meter, nor a constant loss, accounts for all snapshots: "
            f"the best, {_phrase(best, history)}, leaves χ² {best.left:.1f}, limit {best.limit:.1f}."
        )
        return [text, *_untried(f)]
    out = [_either(f, history) if f.outcome == "either" else _settled(f, history)]
    if f.outcome == "either":
        out.append(_next(f))
    elif f.offset and f.slope and math.isfinite(f.slope.size):
        out.append(_both(f))
    if f.outcome == "constant":
        out += _zero_test(f)
    if f.noise > NOISY and f.outcome != "constant":
        out.append(
            f"The values themselves are uncertain (their error is {100 * f.noise:.0f} % of their mean square): so far "
            "are the shares off."
        )
    return out + _untried(f) + _of_changing_size(history)


def _of_changing_size(history: History) -> list[str]:
    """Faults of domains that have no reason to keep a size or a share are not weighed here, and that is said."""
    others = [c.name for c in history.result.model.candidates if c.column >= 0 and c.kind != "leak"]
    if not others:
        return []
    named = others[0] if len(others) == 1 else f"{others[0]} and {len(others) - 1} more"
    about = f"Possible faults whose size may differ from snapshot to snapshot ({named}) are not weighed here"
    return [f"{about}: see the explanations of the single snapshots."]


def _untried(f: FlowLevels) -> list[str]:
    if not f.untried:
        return []
    untried = ", ".join(f.untried)
    return [
        f"Errors of scale were not tried for {untried}: what they should read is not known well enough from others."
    ]


def _span(f: FlowLevels) -> str:
    if not f.tag:
        return f"over {f.count} snapshots"
    if f.one_level:
        return f"at the one level of {plain(0.5 * (f.lowest + f.highest), _digit(f))} {f.unit}"
    return f"at every level from {plain(f.lowest, _digit(f))} to {plain(f.highest, _digit(f))} {f.unit}"


def _digit(f: FlowLevels) -> float:
    return max(abs(f.highest), abs(f.lowest)) / 100 or 1.0


def _phrase(m: LevelModel, history: History) -> str:
    if m.shape == "constant":
        c = next(c for c in history.result.model.candidates if c.name == m.names[0])
        said = fault_phrase(SizedFault(c, m.size, m.sigma))
        more = {"bias": "; a zero offset", "leak": "; a leak, or a steady user that no meter reads"}.get(c.kind, "")
        return f"{said} (± {plain(m.sigma, m.sigma)}{more})"
    share = f"{plain(100 * abs(m.size), 100 * m.sigma)} ± {plain(100 * m.sigma, 100 * m.sigma)} %"
    direction = "high" if m.size > 0 else "low"
    if m.shape == "scale":
        return f"{m.names[0]} reads {direction} by {share} of its value (scale)"
    return f"all of {', '.join(m.names)} {direction} by the same share, {share}"


def _settled(f: FlowLevels, history: History) -> str:
    constant = f.outcome == "constant"
    told = [", or ".join(_phrase(m, history) for m in c) for c in f.classes]
    fits = f"χ² {f.classes[0][0].left:.2f}, limit {f.classes[0][0].limit:.2f}"
    text = f"The error is {'constant' if constant else 'proportional'}, {_span(f)} ({fits}): {told[0]}."
    if len(told) > 1:
        text += f" Not excluded: {'; '.join(told[1:])}."
    mine = {name for c in f.classes for m in c for name in m.names}
    every = [m for m in f.rejected if (m.shape == "constant") != constant]
    against = _distinct([m for m in every if mine & set(m.names)] or every)[:3]
    if against:
        told = [f"{_share(m) if constant else _constant(m)} leaves χ² {m.left:.1f}" for m in against]
        text += (
            f" Not {'an error of scale' if constant else 'a leak or a zero offset'}: {', '.join(told)}, limit "
            f"{against[0].limit:.2f}. Without any fault {f.left:.0f} is left."
        )
    return text


def _distinct(models: list[LevelModel]) -> list[LevelModel]:
    """The first of those that leave the same."""
    out: list[LevelModel] = []
    for m in models:
        if not out or m.left > out[-1].left * (1 + 1e-9) + 1e-9:
            out.append(m)
    return out


def _constant(m: LevelModel) -> str:
    return f"a constant of {plain(abs(m.size), m.sigma)} {m.unit}"


def _share(m: LevelModel) -> str:
    return f"{signed(100 * m.size, 100 * m.sigma)} % of {', '.join(m.names)}"


def _both(f: FlowLevels) -> str:
    assert f.offset is not None
    assert f.slope is not None
    constant = f.outcome == "constant"
    extra = f.slope if constant else f.offset
    needed = abs(extra.size) > NEEDED * extra.sigma
    size = (
        f"a share of {signed(100 * extra.size, 100 * extra.sigma)} ± {plain(100 * extra.sigma, 100 * extra.sigma)} %"
        if constant
        else f"a constant of {signed(extra.size, extra.sigma)} ± {plain(extra.sigma, extra.sigma)} {f.unit}"
    )
    return f"With both terms for {f.tag}, {size} comes on top: {'needed too' if needed else 'not needed'}."


def _zero_test(f: FlowLevels) -> list[str]:
    kinds = {m.kind: m for m in f.classes[0]}
    meters = [m.item for c in f.classes for m in c if m.kind == "bias"]
    if "bias" not in kinds or len(kinds) < 2:
        return []
    return [
        f"A zero test of {' and '.join(meters)} with the valve closed separates the two: a zero offset stays, a loss goes."
    ]


def _either(f: FlowLevels, history: History) -> str:
    from_where = (
        "one flow level"
        if f.one_level
        else f"flow levels from {plain(f.lowest, _digit(f))} to {plain(f.highest, _digit(f))} {f.unit}"
    )
    constant = _best(f, True)
    scale = _best(f, False)
    assert constant is not None
    assert scale is not None
    return (
        f"Cannot tell from {from_where}: constant ({_phrase(constant, history)}; leaves χ² {constant.left:.2f}) and "
        f"proportional ({_phrase(scale, history)}; leaves χ² {scale.left:.2f}) are both not excluded."
    )


def _best(f: FlowLevels, constant: bool) -> LevelModel | None:
    """Best surviving model of a shape; that of the meter whose values are quoted before others that fit alike."""
    found = [m for c in f.classes for m in c if (m.shape == "constant") == constant]
    if not found:
        return None
    least = min(m.left for m in found)
    near = [m for m in found if m.left <= least + 1e-9 * (1 + least)]
    return next((m for m in near if f.tag in m.names), near[0])


def _next(f: FlowLevels) -> str:
    n = f.next
    if n is None:
        return "No meter may be off both ways, so no other level of one of them would tell."
    sides = []
    digit = max(abs(n.now), 1e-300) / 100
    if math.isfinite(n.below):
        sides.append(f"at {plain(n.below, digit)} {n.unit} or lower")
    if math.isfinite(n.above):
        sides.append(f"at {plain(n.above, digit)} {n.unit} or higher")
    if not sides:
        return f"No other level of {n.tag} would tell them apart in one more snapshot: the error is too small for that."
    return (
        f"One more snapshot with {n.tag} {', or '.join(sides)} would tell (now {plain(n.now, digit)} {n.unit}; chance "
        f"{100 * n.power:.0f} %)."
    )
