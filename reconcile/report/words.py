"""Sentences: what was found, in words that an engineer can act on."""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from ..accounts import Account, Accounts, Alternative, SizedFault
from ..diagnose.verdict import Conclusion, Reason
from .campaign import not_used, verdict_line_of
from .numbers import plain, signed

if TYPE_CHECKING:
    from ..results import Result
    from ..snapshot import Snapshot

__all__ = [
    "MARKS",
    "Suspect",
    "alternative_name",
    "explanations_in_words",
    "fault_phrase",
    "label",
    "named_in_short",
    "p_value",
    "percent",
    "remarks_on_explanations",
    "short_name",
    "shown_explanations",
    "smearing_in_words",
    "suspects_of",
    "test_phrase",
    "verdict_line",
    "verdict_sentences",
]

MARKS = {"agrees": "✓", "watch": "!", "does not agree": "✗", "cannot tell": "?"}
"""Each word of evidence has a mark, so that colour is never needed."""

INTERVAL = 1.959963984540054
IMPROBABLE = 0.02
MOST_ALTERNATIVES = 8


@dataclass(frozen=True)
class Suspect:
    """A fault that an explanation of a snapshot names, with what it cannot be told apart from."""

    name: str
    kind: str
    item: str
    unit: str
    size: float
    sigma: float
    probability: float
    tied_with: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain data, safe for JSON."""
        return {
            "fault": self.name,
            "kind": self.kind,
            "item": self.item,
            "unit": self.unit,
            "size": self.size,
            "sigma": self.sigma,
            "probability": self.probability,
            "tied_with": list(self.tied_with),
        }


def percent(probability: float) -> str:
    """Probability in whole percent, never 0 or 100."""
    if not math.isfinite(probability):
        return "unknown"
    if probability > 0.99:
        return "over 99 %"
    return "under 1 %" if probability < 0.01 else f"{100 * probability:.0f} %"


def fault_phrase(fault: SizedFault) -> str:
    """What a fault says, with its size, e.g. ``R reads high by 7.6 kg/h``."""
    c = fault.candidate
    shown = abs(fault.size) if "{direction}" in c.says or c.side != 0 else fault.size
    direction = "high" if fault.size > 0 else "low"
    text = c.says.format(item=c.item, size=plain(shown, fault.sigma), unit=c.unit, direction=direction)
    return " ".join(text.split())


def alternative_phrase(alternative: Alternative) -> str:
    """All faults of one set, joined by `and`."""
    return " and ".join(fault_phrase(f) for f in alternative.faults)


def label(fault: SizedFault) -> str:
    """Name of a fault for people: a stated value and a shared cause are told as such."""
    name = fault.candidate.name
    if name.startswith("known:"):
        return f"stated {name.removeprefix('known:')}"
    return name.removeprefix("shared:")


def short_name(snapshot: Snapshot) -> tuple[str, float]:
    """Name of the most likely explanation, alternatives joined by `or`, and its probability."""
    a = snapshot.accounts
    if a is None or not a.standing:
        return "no explanation found" if a is not None else "", math.nan
    best = a.standing[0]
    return " or ".join(alternative_name(s) for s in best.alternatives), best.probability


def suspects_of(snapshot: Snapshot) -> tuple[Suspect, ...]:
    """Every fault that a standing explanation names, once, in the explanation where it is most probable."""
    a = snapshot.accounts
    if a is None or snapshot.test.status != "disagrees":
        return ()
    rivals = {f.candidate.name for account in a.standing for s in account.alternatives for f in s.faults}
    out: dict[str, Suspect] = {}
    for account in a.standing:
        for s in account.alternatives:
            for f in s.faults:
                c = f.candidate
                others = (
                    ()
                    if a.conclusion is Conclusion.ONE
                    else tuple(sorted(rivals - {g.candidate.name for g in s.faults}))
                )
                found = Suspect(c.name, c.kind, c.item, c.unit, f.size, f.sigma, s.probability, others)
                if c.name not in out or out[c.name].probability < s.probability:
                    out[c.name] = found
    return tuple(out.values())


# ------------------------------------------------------------------ verdict


def test_phrase(snapshot: Snapshot) -> str:
    """Test value with its limit, never alone."""
    t = snapshot.test
    if t.checks == 0:
        return "no check possible"
    return f"χ² {t.objective:.2f}, limit {t.limit:.2f} at {100 * t.level:g} %, p {p_value(t.p)}"


def p_value(p: float) -> str:
    """A p-value, small ones by their size."""
    if not math.isfinite(p):
        return "-"
    if p < 1e-300:
        return "under 1e-300"
    return f"{p:.1g}" if p < 0.001 else f"{p:.4f}" if p < 0.01 else f"{p:.3f}"


def verdict_line(result: Result) -> str:
    """One line: how many readings and checks, whether they agree, who is suspected, what cannot be checked."""
    if result.size == 1:
        if result.table.failed:
            return verdict_line_of(result, 0)
        return " ".join(verdict_sentences(result.snapshot(0)))
    words = Counter(result.words[i] for i in range(result.size) if i not in result.table.failed)
    parts = [f"{n} {_plural(word, n)}" for word, n in words.items()]
    parts += not_used(result)
    text = f"{result.size} snapshots: {', '.join(parts)}."
    named: Counter[str] = Counter()
    for i in range(result.size):
        if i not in result.table.failed and result.suspicious[i]:
            named[short_name(result.snapshot(i))[0]] += 1
    if named:
        most, count = named.most_common(1)[0]
        text += f" Most often named: {most} ({count} of {sum(named.values())})."
    return text


def _plural(word: str, count: int) -> str:
    if word == "does not agree":
        return "does not agree" if count == 1 else "do not agree"
    return {"agrees": "agrees" if count == 1 else "agree", "watch": "to watch"}.get(word, word)


def verdict_sentences(snapshot: Snapshot) -> list[str]:
    """Verdict of one snapshot in a few sentences."""
    t = snapshot.test
    meters = [r for r in snapshot.readings if r.kind == "meter" and math.isfinite(r.reading)]
    unchecked = [r for r in meters if r.word == "not checked"]
    head = f"{_count(len(meters), 'reading')}, {_count(t.checks, 'check')}: "
    if t.checks == 0:
        return [
            head + "no check possible, since the balances leave nothing to compare.",
            "The adjusted values are the readings, and what follows from them.",
        ]
    out = []
    if t.status == "disagrees":
        verb = "to watch" if snapshot.word == "watch" else "do not agree"
        out.append(head + f"{verb} ({test_phrase(snapshot)}).")
        out.extend(named_in_short(snapshot.accounts))
    elif t.status == "suspiciously good":
        out.append(
            head + f"agree suspiciously well ({test_phrase(snapshot)}): the sigmas are probably too large, "
            "or readings are computed from one another."
        )
    else:
        out.append(head + f"agree within their sigmas ({test_phrase(snapshot)}).")
    if unchecked:
        tags = ", ".join(r.tag for r in unchecked)
        out.append(f"Not checked by anything: {tags}.")
    return out


def _standing_in_short(a: Accounts, limit: int = 3) -> str:
    """The first explanations with their probabilities, most probable first."""
    told = sorted(a.standing, key=lambda x: -x.probability)[:limit]
    rest = len(a.standing) - len(told)
    text = "; ".join(
        f"{' or '.join(alternative_phrase(s) for s in plausible_alternatives(x)[0])} ({percent(x.probability)})"
        for x in told
    )
    return text + (f"; {rest} more are not excluded" if rest else "")


def _count(n: int, noun: str) -> str:
    return f"{n} {noun}" if n == 1 else f"{n} {noun}s"


def named_in_short(a: Accounts | None) -> list[str]:
    """Who is suspected, in a sentence or two."""
    if a is None:
        return []
    if not a.standing:
        if a.max_faults == 0:
            return ["Which reading is wrong cannot be told."]
        return [
            (
                f"No set of up to {a.max_faults} possible faults accounts for it: several readings, a balance that is "
                "not drawn right, or sigmas that are too small."
            )
        ]
    best = a.standing[0]
    first = best.alternatives[0]
    if a.nothing_wrong > best.probability:
        nothing = f"nothing wrong: probability {percent(a.nothing_wrong)}"
        return [
            f"Faults are rare, so chance alone is likelier than any of them ({nothing}).",
            f"If one is there: {_standing_in_short(a)}.",
        ]
    if a.conclusion is Conclusion.ONE:
        return [f"Most likely {alternative_phrase(first)} (probability {percent(first.probability)})."]
    least = f"At least {a.at_least} faults. " if a.at_least and a.at_least > 1 else ""
    if Reason.TIED in a.reasons:
        plausible, others = plausible_alternatives(best)
        options = ", or ".join(alternative_phrase(s) for s in plausible)
        more = f" ({others} more fit equally well, but would have to be improbably large)" if others else ""
        return [f"{least}Cannot tell: {options}{more}."]
    if Reason.SATURATED in a.reasons and best.checks == 0:
        return [f"{least}Cannot tell: with {best.count} assumed no check is left that could contradict it."]
    rivals = ", ".join(_names(e) for e in a.standing[1:4])
    text = f"{least}{alternative_phrase(first)} fits best"
    text += f" (probability {percent(first.probability)})"
    if rivals:
        text += f"; not excluded: {rivals}" + (", ..." if len(a.standing) > 4 else "")
    return [f"Cannot tell for sure. {text}."]


# ------------------------------------------------------------------ explanations


def explanations_in_words(snapshot: Snapshot, limit: int = 6) -> list[list[str]]:
    """Every standing explanation as a few lines: its sets of faults, then what granting it leaves.

    Parameters
    ----------
    snapshot : Snapshot
    limit : int
        At most so many explanations.

    Returns
    -------
    list of list of str
    """
    a = snapshot.accounts
    if a is None or snapshot.test.status != "disagrees":
        return []
    return [_told(account) for account in shown_explanations(a, limit)]


def shown_explanations(a: Accounts, limit: int = 6) -> tuple[Account, ...]:
    """Standing explanations worth a paragraph: the first three, and others that are not quite improbable."""
    return tuple(
        x for i, x in enumerate(a.standing) if i == 0 or x.probability >= 0.01 or (i < 3 and x.probability >= 0.001)
    )[:limit]


def remarks_on_explanations(snapshot: Snapshot, limit: int = 6) -> list[str]:
    """Sentences behind the explanations: what was rejected, and what would separate those that stand."""
    a = snapshot.accounts
    if a is None or snapshot.test.status != "disagrees":
        return []
    out = []
    hidden = len(a.standing) - len(shown_explanations(a, limit))
    if hidden:
        further = "1 further explanation is" if hidden == 1 else f"{hidden} further explanations are"
        out.append(f"{further} not excluded, but less probable.")
    rejected = [x for x in a.ranked if not x.survives and x.count == 1 and x.left > x.limit][:3]
    if rejected and a.standing:
        out.append(
            "Rejected: "
            + "; ".join(f"{_names(x)} alone leaves χ² {x.left:.2f}, limit {x.limit:.2f}" for x in rejected)
            + "."
        )
    by_sign = [x for x in a.ranked if x.excluded_by_sign and not x.alternatives and x.left <= x.limit]
    if by_sign:
        names = [alternative_name(s) for x in by_sign for s in x.excluded_by_sign]
        more = f" and {len(names) - 4} more" if len(names) > 4 else ""
        out.append(f"Excluded because their sign is impossible: {', '.join(names[:4])}{more}.")
    tests = separating_tests(a)
    if tests:
        out.append("To separate: " + "; ".join(tests) + ".")
    return out


def alternative_name(alternative: Alternative) -> str:
    """Names of the faults of one set."""
    return " and ".join(label(f) for f in alternative.faults)


def smearing_in_words(result: Result, index: int, limit: int = 3) -> list[str]:
    """What the adjusted values hide if an explanation holds: they close all the same.

    Parameters
    ----------
    result : Result
    index : int
        Snapshot, counted from 0.
    limit : int
        At most so many explanations, and so many values of each.

    Returns
    -------
    list of str
        Empty where the readings agree, or where a decision has already put the values right.
    """
    from ..refit import granted_all, smeared

    if index in result.decisions:
        return []
    told = []
    for alternative, granted in granted_all(result, index)[:limit]:
        off = smeared(result, index, granted)[:limit]
        if off:
            values = ", ".join(f"{v.variable} by {signed(v.off, v.sigma)} {v.unit}" for v in off)
            told.append(f"if {alternative_name(alternative)}, {values}")
    if not told:
        return []
    proves = "All balances close after adjustment whatever is wrong, so that proves nothing."
    return [f"{proves} The adjusted values above would be off: {'; '.join(told)}."]


def _names(account: Account) -> str:
    sets = account.alternatives or account.excluded_by_sign
    return " or ".join("+".join(label(f) for f in s.faults) for s in sets)


def plausible_alternatives(account: Account) -> tuple[tuple[Alternative, ...], int]:
    """Alternatives that are not improbable beside the best one, and how many are left out."""
    best = account.alternatives[0].probability
    kept = tuple(s for s in account.alternatives if s.probability >= IMPROBABLE * best)[:MOST_ALTERNATIVES]
    return kept, len(account.alternatives) - len(kept)


def _told(account: Account) -> list[str]:
    lines = []
    plausible, others = plausible_alternatives(account)
    for i, s in enumerate(plausible):
        told = " and ".join(f"{fault_phrase(f)} ({_spread(f, len(s.faults) == 1)})" for f in s.faults)
        exact = _refitted(account.refitted[i]) if account.refitted else ""
        lines.append(f"{'or ' if i else ''}{told}{exact}")
    lines[-1] += "."
    tied = "No reading here can tell these apart. " if len(lines) > 1 else ""
    if others:
        tied += f"{others} more fit equally well, but would have to be improbably large. "
    if account.checks == 0:
        lines.append(f"{tied}Granting it, no check is left, so nothing could contradict it.")
        return lines
    agree = "the other check agrees" if account.checks == 1 else f"the other {account.checks} checks agree"
    order = "first-order " if account.refitted else ""
    lines.append(
        f"{tied}Granting it, {agree} ({order}χ² {account.left:.2f}, limit {account.limit:.2f}); "
        f"probability {percent(account.probability)}."
    )
    return lines


def _refitted(left: float) -> str:
    return f", refitted χ² {left:.2f}" if math.isfinite(left) else ", not refitted: no consistent answer found"


def _spread(f: SizedFault, interval: bool) -> str:
    spread = f"± {plain(f.sigma, f.sigma)}"
    if not interval:
        return spread
    low, high = f.size - INTERVAL * f.sigma, f.size + INTERVAL * f.sigma
    return f"{spread}; 95 %: {signed(low, f.sigma)} to {signed(high, f.sigma)} {f.candidate.unit}"


def separating_tests(a: Accounts, limit: int = 3) -> list[str]:
    """What a person could do to tell the standing explanations apart."""
    if a.conclusion is Conclusion.ONE or not a.standing:
        return []
    counts: Counter[str] = Counter()
    for account in a.standing:
        for s in plausible_alternatives(account)[0]:
            for f in s.faults:
                c = f.candidate
                if c.separate:
                    counts[c.separate.format(item=c.item)] += 1
    return [text for text, _ in counts.most_common(limit)]
