"""What may be concluded from the explanations of one parity vector."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

from .explain import Evidence, Explanation, Explanations, FaultSet

__all__ = ["Conclusion", "Reason", "Verdict", "verdict"]


class Conclusion(Enum):
    """What the evidence allows to say."""

    AGREES = "agrees"
    ONE = "one explanation"
    CANNOT_TELL = "cannot tell"
    NOT_FOUND = "no explanation found"
    NO_CHECK = "no check possible"


class Reason(Enum):
    """Why nothing more can be said."""

    TIED = "faults that look alike in every check"
    RIVALS = "other explanations are not excluded"
    IMPROBABLE = "the best explanation is not probable enough"
    CHANCE = "that nothing is wrong is as probable"
    SATURATED = "no check is left that could contradict it"
    INCOMPLETE = "not every set of faults could be looked at"


@dataclass(frozen=True)
class Verdict:
    """Conclusion with what it rests on.

    Attributes
    ----------
    evidence : Evidence
        The test of the whole set.
    conclusion : Conclusion
    best : FaultSet or None
        The most probable set that survives and is allowed.
    rivals : tuple of Explanation
        All explanations to print: that of the best set first.
    at_least : int or None
        The smallest number of faults that the evidence allows.
    share : float
        Probability of the best set if something is wrong; nan without a best set.
    none : float
        Probability that nothing is wrong.
    reasons : tuple of Reason
        Why the conclusion is not `Conclusion.ONE`; empty where it is, or where nothing is wrong.
    """

    evidence: Evidence
    conclusion: Conclusion
    best: FaultSet | None
    rivals: tuple[Explanation, ...]
    at_least: int | None
    share: float
    none: float
    reasons: tuple[Reason, ...]


def verdict(found: Explanations, *, threshold: float = 0.8, rival_probability: float = 0.1) -> Verdict:
    """Conclude.

    One explanation is named only if a single set of the smallest number of faults survives the chi-squared limit, no
    candidate ties with it, no other surviving explanation is probable, it is probable enough among all that could be
    wrong, and that something is wrong is more probable than not. A tie is never broken by prior probabilities: they
    are printed, but the readings cannot tell.

    Parameters
    ----------
    found : Explanations
    threshold : float
        Probability of the set, given that something is wrong, from which it may be named.
    rival_probability : float
        From which an explanation with more faults than necessary is a rival.

    Returns
    -------
    Verdict
    """
    nan = float("nan")
    if found.evidence is Evidence.NO_CHECK:
        return Verdict(found.evidence, Conclusion.NO_CHECK, None, (), None, nan, nan, ())
    if found.evidence is Evidence.AGREES:
        return Verdict(found.evidence, Conclusion.AGREES, None, (), 0, nan, found.none, ())
    alive = found.surviving
    if not alive and found.max_faults == 0:
        return Verdict(found.evidence, Conclusion.CANNOT_TELL, None, (), 1, nan, found.none, (Reason.SATURATED,))
    if not alive:
        # Said only of the sets that were looked at.
        fewer = found.complete_to < found.max_faults
        reasons = (Reason.INCOMPLETE,) if fewer else ()
        least = found.complete_to + 1
        return Verdict(found.evidence, Conclusion.NOT_FOUND, None, (), least, nan, found.none, reasons)
    smallest = min(e.faults for e in alive)
    rivals = [e for e in alive if e.faults == smallest or e.probability >= rival_probability]
    rivals.sort(key=lambda e: -e.offered[0].probability)
    best = rivals[0].offered[0]
    share = best.probability / (1 - found.none) if found.none < 1 else 0.0
    checks = {
        Reason.TIED: len(rivals[0].offered) > 1,
        Reason.RIVALS: len(rivals) > 1,
        Reason.IMPROBABLE: share < threshold,
        Reason.CHANCE: found.none >= 0.5,
        Reason.SATURATED: rivals[0].checks_left == 0,
        Reason.INCOMPLETE: found.complete_to < smallest or found.unexplored > 1 - threshold,
    }
    why = tuple(reason for reason, holds in checks.items() if holds)
    conclusion = Conclusion.CANNOT_TELL if why else Conclusion.ONE
    return Verdict(found.evidence, conclusion, best, tuple(rivals), smallest, share, found.none, why)
