"""All sets of faults that fit, without looking at every set.

A set S fits when what it leaves, ``||p - P_S p||^2``, is at most a cutoff. Let A be candidates such that S and A
together still leave more than the cutoff. Then no set between S and S + A fits, so **every set that fits and contains S
contains a candidate outside A**. A is made as large as a pass over the candidates makes it; the branching is over the
few candidates outside, and a branch bans the candidates of its elder siblings, so that no set is met twice. This is the
hitting-set tree over conflicts (Reiter 1987, Artif. Intell. 32, 57) with the bound of regression by leaps and bounds
(a set cannot leave less than one that contains it: Furnival & Wilson 1974, Technometrics 16, 499). Nothing is greedy
about what is found: only the size of A, hence the work, depends on the order of the pass.
"""

from __future__ import annotations

import itertools
from dataclasses import dataclass, field
from math import comb

import numpy as np
import numpy.typing as npt

from .lookalike import PARALLEL

__all__ = ["Found", "search"]

Array = npt.NDArray[np.float64]
Set = tuple[int, ...]


@dataclass(frozen=True)
class Found:
    """What a search found.

    Attributes
    ----------
    sets : tuple of class sets
        Sets that leave at most the cutoff.
    cutoff : float
    complete_to : int
        Every set of up to so many faults that fits is in `sets` or contains one that is.
    with_supersets : bool
        Whether everything of up to `complete_to` faults that contains a set that fits is in `sets`, too.
    nodes : int
        How many sets were branched on.
    """

    sets: tuple[Set, ...]
    cutoff: float
    complete_to: int
    with_supersets: bool
    nodes: int


class _Spent(Exception):
    """The budget of nodes or sets is used up."""


@dataclass
class _Walk:
    most: int
    cutoff: float
    node_limit: int
    set_limit: int
    nodes: int = 0
    with_supersets: bool = True
    sets: list[Set] = field(default_factory=list)

    def visit(self, chosen: Set, banned: npt.NDArray[np.bool_], p: Array, u: Array) -> None:
        left = self.most - len(chosen)
        rss = float(p @ p)
        if rss <= self.cutoff:
            self.record(chosen, banned, left)
            return
        square = np.einsum("rc,rc->c", u, u)
        live = (square > PARALLEL) & ~banned
        if left == 0 or not live.any():
            return
        gain = np.zeros(square.size)
        gain[live] = (p @ u[:, live]) ** 2 / square[live]
        if left == 1:
            hits = np.flatnonzero(live & (rss - gain <= self.cutoff))
            self.sets.extend(tuple(sorted((*chosen, int(j)))) for j in hits)
            self.check()
            return
        self.nodes += 1
        self.check()
        conflict = self.conflict(p, u, live, gain, rss)
        banned = banned.copy()
        for j in conflict[np.argsort(-gain[conflict], kind="stable")]:
            q = u[:, j] / np.sqrt(square[j])
            rest = u - np.outer(q, q @ u)
            # A column that the projection only rounds to zero is zero: signatures had unit length.
            rest[:, np.einsum("rc,rc->c", rest, rest) <= PARALLEL] = 0.0
            self.visit((*chosen, int(j)), banned, p - q * (q @ p), rest)
            banned[j] = True

    def conflict(
        self, p: Array, u: Array, live: npt.NDArray[np.bool_], gain: Array, rss: float
    ) -> npt.NDArray[np.int64]:
        """Candidates outside A: A is grown from what explains least, while together it still leaves too much."""
        space = np.zeros((p.size, 0))
        residual, outside = p.copy(), []
        for j in np.flatnonzero(live)[np.argsort(gain[live], kind="stable")]:
            v = u[:, j] - space @ (space.T @ u[:, j])
            v -= space @ (space.T @ v)
            length = float(np.linalg.norm(v))
            if length <= 1e-10:  # rounding only; what is merely near the space may still point along the residual
                continue
            v /= length
            step = float(v @ residual)
            if rss - step * step > self.cutoff:
                rss -= step * step
                residual -= step * v
                space = np.column_stack([space, v])
            else:
                outside.append(j)
        return np.array(outside, dtype=np.int64)

    def record(self, chosen: Set, banned: npt.NDArray[np.bool_], left: int) -> None:
        self.sets.append(tuple(sorted(chosen)))
        free = [int(j) for j in np.flatnonzero(~banned) if j not in chosen]
        for extra in range(1, left + 1):
            if len(self.sets) + comb(len(free), extra) > self.set_limit:
                self.with_supersets = False
                return
            self.sets.extend(tuple(sorted((*chosen, *more))) for more in itertools.combinations(free, extra))

    def check(self) -> None:
        if self.nodes > self.node_limit or len(self.sets) > self.set_limit:
            raise _Spent


def search(
    parity: Array, units: Array, cutoff: float, max_faults: int, *, node_limit: int = 5000, set_limit: int = 200_000
) -> Found:
    """Find all class sets of up to `max_faults` faults that leave at most `cutoff`.

    Parameters
    ----------
    parity : ndarray, shape (r,)
    units : ndarray, shape (r, c)
        Unit signatures of the classes.
    cutoff : float
        Largest leftover of interest.
    max_faults : int
        At least 1.
    node_limit, set_limit : int
        Budget. The search deepens step by step, and when the budget is spent the last complete step is returned.

    Returns
    -------
    Found
    """
    best = Found((), cutoff, 0, True, 0)
    for most in range(1, max_faults + 1):
        walk = _Walk(most, cutoff * (1 + 1e-9), node_limit, set_limit)
        try:
            walk.visit((), np.zeros(units.shape[1], dtype=bool), parity, units)
        except _Spent:
            return best
        sets = tuple(s for s in walk.sets if s)
        best = Found(sets, cutoff, most, walk.with_supersets, best.nodes + walk.nodes)
    return best
