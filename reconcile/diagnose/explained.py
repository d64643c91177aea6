"""Explanations as plain data: what the evidence says as a whole, and each set of faults with how it fits."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc

from .lookalike import LookAlikes

__all__ = ["Evidence", "Explanation", "Explanations", "FaultSet", "evidence_word"]

Array = npt.NDArray[np.float64]

WATCH = 0.001
"""Between the test level and this p-value the evidence is worth watching; below it, it does not agree."""


class Evidence(Enum):
    """What the whole set of readings says about itself."""

    AGREES = "agrees"
    WATCH = "watch"
    DISAGREES = "does not agree"
    NO_CHECK = "no check possible"


@dataclass(frozen=True)
class FaultSet:
    """One set of candidates, all of them present and no others.

    Attributes
    ----------
    candidates : tuple of int
        Indices of the candidates.
    sizes : ndarray, shape (s,)
        Least-squares size of each, in its own unit.
    covariance : ndarray, shape (s, s)
        Their covariance when this set is the right one.
    probability : float
        Posterior probability of exactly this set.
    allowed : bool
        False where a size has the sign that this fault cannot have; the set is then not offered.
    at_bound : tuple of int
        Candidates that stay at zero in the best fit with the right signs.
    bounded_leftover : float
        What the best fit with the right signs leaves.
    """

    candidates: tuple[int, ...]
    sizes: Array
    covariance: Array
    probability: float
    allowed: bool
    at_bound: tuple[int, ...]
    bounded_leftover: float


@dataclass(frozen=True)
class Explanation:
    """A class of fault sets that fit equally well whatever the readings are.

    Attributes
    ----------
    faults : int
        How many faults it needs.
    members : tuple of FaultSet
        The sets, the most probable first, those that are not allowed last. More than one: a tie.
    leftover : float
        What it leaves of the objective.
    checks_left : int
        Checks that could still contradict it.
    limit, p_value : float
        Chi-squared limit for the leftover, and its p-value; nan where no check is left.
    survives : bool
        Whether the leftover is within the limit and a member is allowed.
    minimal : bool
        Whether it survives and nothing smaller does: no explanation inside it, and not no fault at all.
    probability : float
        Posterior probability of the class: its members, and larger sets that span the same space.
    with_more : float
        The part of `probability` due to these larger sets.
    """

    faults: int
    members: tuple[FaultSet, ...]
    leftover: float
    checks_left: int
    limit: float
    p_value: float
    survives: bool
    minimal: bool
    probability: float
    with_more: float

    @property
    def offered(self) -> tuple[FaultSet, ...]:
        """Members whose sizes have possible signs."""
        return tuple(m for m in self.members if m.allowed)


@dataclass(frozen=True)
class Explanations:
    """Everything found about one parity vector.

    Attributes
    ----------
    evidence : Evidence
    objective : float
        Squared length of the parity vector.
    checks : int
        Its number of entries r.
    p_value : float
        Of the objective when nothing is wrong; nan without checks.
    level : float
        Of the tests.
    max_faults : int
    none : float
        Posterior probability that none of the candidates is present.
    listed : tuple of Explanation
        Ranked by probability.
    candidate : ndarray, shape (k,)
        Posterior probability of each candidate, alone or with others; its prior where nothing checks it.
    at_least : int or None
        The smallest number of faults that survives, 0 where the evidence agrees; None where nothing does.
    alike : LookAlikes
        Ties between candidates.
    evaluated : int
        Number of sets whose probability was computed.
    exhaustive : bool
        Whether that is every set of up to `max_faults` checked candidates.
    complete_to : int
        Every explanation with up to so many faults that survives was found, or contains one that was.
    unexplored : float
        Upper bound of the posterior probability of the sets of up to `max_faults` that were not evaluated. All
        probabilities are relative to the evaluated ones, so each is too high by at most this share.
    prior_beyond : float
        Prior probability of more than `max_faults` faults among the checked candidates, which is not considered.
    """

    evidence: Evidence
    objective: float
    checks: int
    p_value: float
    level: float
    max_faults: int
    none: float
    listed: tuple[Explanation, ...]
    candidate: Array
    at_least: int | None
    alike: LookAlikes
    evaluated: int
    exhaustive: bool
    complete_to: int
    unexplored: float
    prior_beyond: float

    @property
    def surviving(self) -> tuple[Explanation, ...]:
        """Explanations that the evidence does not exclude."""
        return tuple(e for e in self.listed if e.survives)


def evidence_word(objective: float, checks: int, level: float) -> Evidence:
    """Word for the evidence as a whole.

    Parameters
    ----------
    objective : float
    checks : int
    level : float
        Of the chi-squared test; at p < 0.001 (or below the level, where that is smaller) it does not agree.

    Returns
    -------
    Evidence
    """
    if checks == 0:
        return Evidence.NO_CHECK
    p = float(chdtrc(checks, objective))
    if p >= level:
        return Evidence.AGREES
    return Evidence.WATCH if p >= WATCH else Evidence.DISAGREES
