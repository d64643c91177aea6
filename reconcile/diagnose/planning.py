"""What would be noticed, and which meter to add next: no readings are needed, only the network and the sigmas.

A candidate meter reads ``g x`` with its own sigma. Its difference from what the adjusted values already say has
variance ``tau^2 = sigma^2 + g C g'`` and is independent of the evidence there is, so it is one more row of the parity
space; the covariance C of the adjusted values shrinks by ``C g' g C / tau^2``. Where nothing determined ``g x`` before,
there is no new check, but one more direction is determined. Both are closed forms, and adding two meters is doing it
twice.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr, ndtri

from .lookalike import ZERO
from .refusal import Refusal

__all__ = [
    "BreakTie",
    "Coverage",
    "FindFault",
    "Goal",
    "Narrow",
    "NewMeter",
    "Observe",
    "Placement",
    "Plan",
    "coverage",
    "detectable_shift",
    "meter_plan",
    "place",
]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

DETERMINED = 1e-9
"""Relative size below which a combination does not depend on what is undetermined."""

SAME = 1e-9
"""Measures of a goal that differ by this fraction or less differ by rounding alone."""


# ---------------------------------------------------------------------- before any reading


@dataclass(frozen=True)
class Coverage:
    """What the checks would notice.

    Attributes
    ----------
    share : ndarray, shape (k,)
        Share of an error that shows in the checks, ``(sigma |f|)^2`` within [0, 1]: the redundancy number.
    smallest, smallest_corrected : ndarray, shape (k,)
        Smallest error found with the stated power when that candidate alone is tested, and when the level is shared
        between `count` tests (Sidak); inf where nothing would notice it.
    """

    share: Array
    smallest: Array
    smallest_corrected: Array


def detectable_shift(level: float, power: float) -> float:
    """Shift of a standard normal statistic that a two-sided test finds with this power.

    Parameters
    ----------
    level, power : float
        Within (0, 1), power above level.

    Returns
    -------
    float
        The square root of the noncentrality for one degree of freedom.
    """
    if not 0 < level < 1 or not level < power < 1:
        raise Refusal("level-out-of-range", f"need 0 < level < power < 1, not level {level} and power {power}")
    limit = float(-ndtri(level / 2))
    low, high = 0.0, limit + abs(float(ndtri(power))) + 1.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        if not low < middle < high:
            break
        found = ndtr(middle - limit) + ndtr(-middle - limit)
        low, high = (middle, high) if found < power else (low, middle)
    return 0.5 * (low + high)


def coverage(
    signatures: Array, sigma: Array, *, level: float = 0.05, power: float = 0.9, count: int | None = None
) -> Coverage:
    """Share of each error that the checks see, and the smallest error they would find.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
    sigma : ndarray, shape (k,)
        Standard uncertainty of each reading; gives the share and says when a signature counts as zero.
    level, power : float
    count : int, optional
        Number of tests that share the level; the number of candidates when left out.

    Returns
    -------
    Coverage
    """
    f = np.asarray(signatures, dtype=float)
    k = f.shape[1]
    norm = np.linalg.norm(f, axis=0)
    norm = np.where(norm * sigma > ZERO, norm, 0.0)
    n = k if count is None else count
    if n < 1:
        raise Refusal("count-out-of-range", f"the level cannot be shared between {n} tests")
    with np.errstate(divide="ignore"):
        single = detectable_shift(level, power) / norm
        shared = detectable_shift(float(-np.expm1(np.log1p(-level) / n)), power) / norm
    return Coverage(np.clip((norm * sigma) ** 2, 0.0, 1.0), single, shared)


# ---------------------------------------------------------------------- a network that meters can be added to


@dataclass(frozen=True)
class Plan:
    """A network before or after adding meters.

    Attributes
    ----------
    signatures : ndarray, shape (r, k)
        Of the candidate faults.
    cover : ndarray, shape (n, q)
        Factor of the covariance of all variables, measured or not: ``C = cover cover'``.
    response : ndarray, shape (n, k)
        Shift of the adjusted variables per unit of each candidate.
    free : ndarray, shape (n, d)
        Directions of the variables that nothing determines, as columns.
    scale : ndarray, shape (k,)
        Length that each signature would have if the candidate were fully checked, ``1 / sigma`` for a meter.
    """

    signatures: Array
    cover: Array
    response: Array
    free: Array
    scale: Array

    def length_of(self, candidate: int) -> float:
        """Length of a signature; 0 where rounding alone made it."""
        norm = float(np.linalg.norm(self.signatures[:, candidate]))
        return norm if norm > ZERO * self.scale[candidate] else 0.0

    def sigma_of(self, row: Array) -> float:
        """Standard uncertainty of the combination ``row x``; inf where it is not determined."""
        return float(np.linalg.norm(row @ self.cover)) if self.determines(row) else float("inf")

    def determines(self, row: Array) -> bool:
        """Whether ``row x`` is determined."""
        if self.free.shape[1] == 0:
            return True
        reach = row @ self.free
        return bool(np.linalg.norm(reach) <= DETERMINED * np.linalg.norm(row) * np.linalg.norm(self.free, 2))

    def with_meter(self, row: Array, sigma: float) -> Plan:
        """Add a meter that reads ``row x``; its own bias becomes the last candidate.

        Parameters
        ----------
        row : ndarray, shape (n,)
        sigma : float

        Returns
        -------
        Plan
        """
        if not sigma > 0 or not np.isfinite(sigma):
            raise Refusal("sigma-not-positive", "a new meter needs a finite sigma above zero")
        if not np.any(row):
            raise Refusal("meter-reads-nothing", "a new meter must read a variable or a sum of several")
        return self._check(row, sigma) if self.determines(row) else self._determine(row, sigma)

    def _check(self, row: Array, sigma: float) -> Plan:
        r = self.signatures.shape[0]
        v = row @ self.cover
        tau = float(np.hypot(sigma, np.linalg.norm(v)))
        new_row = np.append(-(row @ self.response), 1.0) / tau
        signatures = np.vstack([np.hstack([self.signatures, np.zeros((r, 1))]), new_row])
        gain = self.cover @ v / tau**2
        # (I - v v'/tau^2)^(1/2) = I - v v' / (tau (tau + sigma)): no difference of nearly equal numbers
        cover = self.cover - np.outer(self.cover @ v, v) / (tau * (tau + sigma))
        response = np.column_stack([self.response - np.outer(gain, row @ self.response), gain])
        return Plan(signatures, cover, response, self.free, np.append(self.scale, 1 / sigma))

    def _determine(self, row: Array, sigma: float) -> Plan:
        r = self.signatures.shape[0]
        w = row @ self.free
        direction = self.free @ (w / (w @ w))  # moves the combination by one, and nothing that is determined
        signatures = np.hstack([self.signatures, np.zeros((r, 1))])
        cover = np.column_stack([self.cover - np.outer(direction, row @ self.cover), sigma * direction])
        response = np.column_stack([self.response - np.outer(direction, row @ self.response), direction])
        q = np.linalg.qr(w[:, None], mode="complete")[0]
        return Plan(signatures, cover, response, self.free @ q[:, 1:], np.append(self.scale, 1 / sigma))


def meter_plan(
    signatures: Array, cover: Array, meters: Sequence[int] | Ints, sigma: Array, *, free: Array | None = None
) -> Plan:
    """Plan of a network whose candidates are the biases of its meters, one variable each.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
    cover : ndarray, shape (n, q)
        See `Plan`.
    meters : sequence of int, length k
        Row of `cover` that each meter reads.
    sigma : ndarray, shape (k,)
        Standard uncertainty of each meter; errors are uncorrelated.
    free : ndarray, shape (n, d), optional
        See `Plan`; everything is determined when left out.

    Returns
    -------
    Plan
    """
    c = np.asarray(cover, dtype=float)
    s = np.asarray(sigma, dtype=float)
    # x = y - S F'F y (+ constant), hence dx/dy = C S^-1.
    response = c @ c[np.asarray(meters, dtype=np.int64)].T / s**2
    nothing = np.zeros((c.shape[0], 0))
    return Plan(np.asarray(signatures, dtype=float), c, response, nothing if free is None else free, 1 / s)


# ---------------------------------------------------------------------- goals


@dataclass(frozen=True)
class FindFault:
    """Find a fault of one candidate: its smallest detectable size."""

    candidate: int
    level: float = 0.05
    power: float = 0.9

    def measure(self, plan: Plan) -> float:
        """Smallest size found with the stated power; inf where nothing would notice it."""
        norm = plan.length_of(self.candidate)
        return detectable_shift(self.level, self.power) / norm if norm > 0 else float("inf")


@dataclass(frozen=True)
class Narrow:
    """Narrow a value: the standard uncertainty of ``row x`` after adjustment."""

    row: Array

    def measure(self, plan: Plan) -> float:
        """Standard uncertainty; inf where the value is not determined."""
        return plan.sigma_of(self.row)


@dataclass(frozen=True)
class BreakTie:
    """Tell candidates apart: the largest correlation between the signatures of any two of them."""

    candidates: tuple[int, ...]

    def measure(self, plan: Plan) -> float:
        """Largest ``|cos|``; 1 where they are tied or one of them is not checked."""
        norm = np.array([plan.length_of(i) for i in self.candidates])
        if np.any(norm == 0):
            return 1.0
        f = plan.signatures[:, list(self.candidates)]
        cosine = np.abs((f / norm).T @ (f / norm))
        return float(min(1.0, cosine[np.triu_indices(len(self.candidates), 1)].max()))


@dataclass(frozen=True)
class Observe:
    """Determine values: how many of the combinations ``rows x`` are still not determined."""

    rows: Array

    def measure(self, plan: Plan) -> float:
        """Number of rows that are not determined."""
        return float(sum(not plan.determines(row) for row in np.atleast_2d(self.rows)))


Goal = FindFault | Narrow | BreakTie | Observe


@dataclass(frozen=True)
class NewMeter:
    """A meter that could be added.

    Attributes
    ----------
    row : ndarray, shape (n,)
        What it reads, as a combination of the variables.
    sigma : float
        Its standard uncertainty.
    price : float
        In any one currency; decides between placements that reach the same.
    """

    row: Array
    sigma: float
    price: float = 0.0


@dataclass(frozen=True)
class Placement:
    """One way to add meters.

    Attributes
    ----------
    meters : tuple of int
        Which of the offered meters.
    before, after : float
        The measure of the goal; smaller is better.
    effect : bool
        False where it changes nothing.
    price : float
    checks : int
        Checks after.
    """

    meters: tuple[int, ...]
    before: float
    after: float
    effect: bool
    price: float
    checks: int


def place(plan: Plan, offered: Sequence[NewMeter], goal: Goal | None, *, count: int = 1) -> tuple[Placement, ...]:
    """Rank meters, or sets of them, that could be added, by what they do for a goal.

    Every set of `count` meters is tried; the ranking is exact.

    Parameters
    ----------
    plan : Plan
    offered : sequence of NewMeter
    goal : FindFault, Narrow, BreakTie or Observe
        The ranking depends on it, so there is none without a goal.
    count : int
        How many to add together.

    Returns
    -------
    tuple of Placement
        The best first; equal ones by price, then in the order offered.

    Raises
    ------
    Refusal
        ``goal-missing``, or ``count-out-of-range``.
    """
    if goal is None:
        raise Refusal(
            "goal-missing",
            "which meter is best depends on what it is for",
            "say whether to find a fault, narrow a value, break a tie or make values observable",
        )
    if not 1 <= count <= len(offered):
        raise Refusal("count-out-of-range", f"{count} meters asked, {len(offered)} offered")
    before = goal.measure(plan)
    placements = []
    for which in itertools.combinations(range(len(offered)), count):
        grown = plan
        for i in which:
            grown = grown.with_meter(offered[i].row, offered[i].sigma)
        after = goal.measure(grown)
        same = after == before or (np.isfinite(before) and abs(after - before) <= SAME * abs(before))
        price = sum(offered[i].price for i in which)
        placements.append(Placement(which, before, after, not same, price, grown.signatures.shape[0]))
    # What is equal but for the rounding of its sums shares a place: that of the smallest of them.
    measures = np.array([p.after for p in placements])
    order = np.argsort(measures, kind="stable")
    rank = np.empty(measures.size, dtype=np.int64)
    rank[order] = np.cumsum(measures[order] > np.append(-np.inf, measures[order][:-1] * (1 + SAME)))
    best_first = sorted(range(measures.size), key=lambda i: (rank[i], placements[i].price, placements[i].meters))
    return tuple(placements[i] for i in best_first)
