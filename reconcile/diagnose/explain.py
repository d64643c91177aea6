"""Explanations of the evidence: which sets of faults account for it, and how probable each is.

The parity vector p has length r and unit covariance, ``p ~ N(sum_h f_h b_h, I)`` with signatures f and sizes b. A set S
of faults *survives* when what it leaves, ``||p - P_S p||^2``, is below the chi-squared limit for the ``r - |S|`` checks
that are left. Sets whose signatures span the same space leave the same whatever the readings are; they are one
explanation and are listed once. Probabilities come from the prior of each fault with its size integrated out
(`evidence`), over all sets of up to `max_faults` faults and no fault at all.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc, chdtri, logsumexp

from .evidence import Weights, log_symmetric_sums, prepare_weights
from .explained import Evidence, Explanation, Explanations, FaultSet, evidence_word
from .faultsets import Set, Spans, choose_all, count_sets, expand, make_spans, raw_sets
from .lookalike import ANGLE, basis, classes
from .refusal import Refusal
from .search import search

__all__ = ["Evidence", "Explainer", "Explanation", "Explanations", "FaultSet", "evidence_word", "explanations"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True)
class _Table:
    """Sets, their spaces, and everything about their probability that does not depend on the evidence."""

    spans: Spans
    weights: tuple[Weights, ...]
    raw: tuple[Set, ...]
    span_of: Ints
    spanning: npt.NDArray[np.bool_]


class Explainer:
    """Prepared once for a network; explains any number of parity vectors.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
        Shift of the parity vector per unit of each candidate.
    sides : array of int, shape (k,)
        The sign that a size must have, +1 or -1; 0 for either.
    fault_rate : array of shape (k,)
        Prior probability of each candidate, within [0, 1).
    size_prior : array of shape (k,)
        Standard deviation of the normal prior of the size (half-normal where one-sided), in the candidate's unit.
    max_faults : int
        Most faults at once; below the number of checks, since otherwise every set would fit.
    limit_on_sets : int
        Up to so many sets all of them are evaluated. Beyond it, a search that is complete for what survives.
    scale : array of shape (k,), optional
        See `lookalike.classes`.
    saturated : bool
        Allow as many faults as checks. Each such set fits and none can be contradicted: for one check, this
        lists what could be the cause.

    Raises
    ------
    Refusal
        ``too-many-faults``, ``sides-not-signs``, ``fault-rate-out-of-range``, ``size-prior-not-positive``.
    """

    def __init__(
        self,
        signatures: Array,
        *,
        sides: npt.ArrayLike = 0,
        fault_rate: npt.ArrayLike,
        size_prior: npt.ArrayLike,
        max_faults: int,
        limit_on_sets: int = 200_000,
        scale: npt.ArrayLike | None = None,
        saturated: bool = False,
    ) -> None:
        f = np.asarray(signatures, dtype=float)
        self.checks, k = f.shape
        allowed = self.checks if saturated else max(self.checks - 1, 0)
        if max_faults < 0 or (max_faults > allowed and self.checks > 0):
            raise Refusal(
                "too-many-faults",
                f"{max_faults} faults asked, {self.checks} checks: every set would fit",
                f"ask for at most {allowed}",
            )
        self.signatures = f
        self.sides = np.broadcast_to(np.asarray(sides, dtype=np.int64), k)
        self.rate = np.broadcast_to(np.asarray(fault_rate, dtype=float), k)
        self.size_prior = np.broadcast_to(np.asarray(size_prior, dtype=float), k)
        if not np.all(np.isin(self.sides, (-1, 0, 1))):
            raise Refusal("sides-not-signs", "a side is -1, 0 or +1")
        if not np.all((self.rate >= 0) & (self.rate < 1)):
            raise Refusal("fault-rate-out-of-range", "a prior probability of a fault lies within 0 and 1")
        if not np.all((self.size_prior > 0) & np.isfinite(self.size_prior)):
            raise Refusal("size-prior-not-positive", "the prior of a size needs a finite spread above zero")
        self.max_faults = max_faults
        self.limit_on_sets = limit_on_sets
        self.alike = classes(f, scale=scale)
        checked = self.alike.label >= 0
        with np.errstate(divide="ignore"):
            self.log_odds = np.log(self.rate) - np.log1p(-self.rate)
        self.exhaustive = count_sets(int(checked.sum()), max_faults) <= limit_on_sets
        self._table = self._tabulate(raw_sets(self.alike, max_faults)) if self.exhaustive else None
        # log of the total prior weight of the sets of 0 .. k faults, relative to no fault
        every = log_symmetric_sums(self.log_odds[checked], int(checked.sum()) if checked.sum() <= 2000 else max_faults)
        total = -np.log1p(-self.rate[checked]).sum()
        self.prior_beyond = float(max(0.0, -np.expm1(min(0.0, logsumexp(every[: max_faults + 1]) - total))))
        sided = np.where(self.sides != 0, np.log(2.0), 0.0)
        self._most = log_symmetric_sums((self.log_odds + sided)[checked], max_faults)
        square = (self.size_prior * self.alike.norms)[checked] ** 2
        self._least_shrink = 0.5 * float(np.log1p(square.min())) if square.size else 0.0

    # ------------------------------------------------------------------ preparation

    def _tabulate(self, pairs: Iterable[tuple[Set, Set]]) -> _Table:
        listed = list(pairs)
        spans = make_spans((c for _, c in listed), self.alike.units)
        by_size: dict[int, list[int]] = {}
        for i, (one, _) in enumerate(listed):
            by_size.setdefault(len(one), []).append(i)
        weights, order = [], []
        for s in sorted(by_size):
            rows = np.array([listed[i][0] for i in by_size[s]], dtype=np.int64)
            weights.append(prepare_weights(rows, self.signatures, self.sides, self.log_odds, self.size_prior))
            order.extend(by_size[s])
        raw = tuple(listed[i][0] for i in order)
        span_of = np.array([spans.number[listed[i][1]] for i in order], dtype=np.int64)
        rank = np.array([len(spans.sets[n][0]) for n in range(len(spans.sets))], dtype=np.int64)
        size = np.array([len(x) for x in raw], dtype=np.int64)
        spanning = size == rank[span_of] if raw else np.zeros(0, dtype=bool)
        return _Table(spans, tuple(weights), raw, span_of, spanning)

    def _searched(self, p: Array, cutoff: float, mass_floor: float) -> tuple[_Table, Array, float, int]:
        """Table of the sets found by searching, their weights, the bound of the rest, and how far it is complete."""
        objective = float(p @ p)
        bound = 1.0
        best: tuple[_Table, Array, float, int] | None = None
        for _ in range(3):
            found = search(p, self.alike.units, cutoff, self.max_faults, set_limit=self.limit_on_sets)
            singles = [(c,) for c in range(len(self.alike.members))]
            wanted = list(dict.fromkeys([*singles, *found.sets]))
            spare = self.limit_on_sets
            pairs: list[tuple[Set, Set]] = []
            whole = True
            for one in wanted:
                grown = list(itertools.islice(expand(one, self.alike, self.max_faults), max(spare, 0) + 1))
                if len(grown) > spare and len(one) > 1:
                    whole = False
                    break
                spare -= len(grown)
                pairs.extend((raw, one) for raw in grown)
            table = self._tabulate(pairs)
            logs = self._log_weights(table, p)
            mass = float(logsumexp(np.append(logs, 0.0)))
            # A set that was not evaluated leaves more than the cutoff, or nothing is known of it.
            known = found.complete_to if found.with_supersets and whole else 0
            below = logsumexp(self._most[1 : known + 1]) - 0.5 * cutoff if known else -np.inf
            above = logsumexp(self._most[known + 1 :]) if known < self.max_faults else -np.inf
            rest = float(np.logaddexp(below, above) + 0.5 * objective - self._least_shrink)
            bound = float(np.exp(rest - np.logaddexp(rest, mass)))
            if best is None or (bound < best[2] and found.complete_to >= best[3]):
                best = table, logs, bound, found.complete_to
            wider = objective + 2 * (float(logsumexp(self._most[1:])) - self._least_shrink - np.log(mass_floor) - mass)
            if bound <= mass_floor or known < self.max_faults or not cutoff < wider < objective:
                break
            cutoff = wider
        assert best is not None
        return best

    # ------------------------------------------------------------------ one parity vector

    def _log_weights(self, table: _Table, p: Array) -> Array:
        h = self.signatures.T @ p
        parts = [w.log_weight(h) for w in table.weights]
        return np.concatenate(parts) if parts else np.zeros(0)

    def posterior(self, parity: Array) -> tuple[tuple[Set, ...], Array]:
        """Posterior probabilities of all sets, without making a list of explanations; exhaustive only.

        Parameters
        ----------
        parity : ndarray, shape (r,)

        Returns
        -------
        sets : tuple of tuple of int
            The empty set first.
        probability : ndarray, shape (number of sets,)
        """
        if self._table is None:
            raise Refusal("too-many-sets", "there are too many sets to list the probabilities of all")
        logs = np.concatenate([[0.0], self._log_weights(self._table, np.asarray(parity, dtype=float))])
        return ((), *self._table.raw), np.exp(logs - logsumexp(logs))

    def explain(
        self, parity: Array, *, level: float = 0.05, most_listed: int = 300, mass_floor: float = 0.01
    ) -> Explanations:
        """Explain one parity vector.

        Parameters
        ----------
        parity : ndarray, shape (r,)
        level : float
            Of the chi-squared tests, within (0, 1).
        most_listed : int
            Most explanations to list besides single faults and smallest surviving ones: the most probable.
        mass_floor : float
            Where sets are searched rather than enumerated: widen the search until the sets left out have at most
            this posterior probability, as far as the limit on sets allows.

        Returns
        -------
        Explanations
        """
        p = np.asarray(parity, dtype=float)
        if p.shape != (self.checks,) or not np.all(np.isfinite(p)):
            raise Refusal("parity-not-usable", f"the parity vector must be {self.checks} finite numbers")
        if not 0 < level < 1:
            raise Refusal("level-out-of-range", f"a test level lies within 0 and 1, not {level}")
        limits = np.array(
            [chdtri(self.checks - s, level) if s < self.checks else np.nan for s in range(self.max_faults + 1)]
        )
        table, unexplored, complete_to = self._table, 0.0, self.max_faults
        if table is None:
            table, logs, unexplored, complete_to = self._searched(p, float(np.nanmax(limits[1:])), mass_floor)
        else:
            logs = self._log_weights(table, p)
        norm = float(logsumexp(np.append(logs, 0.0)))
        probability = np.exp(logs - norm)
        none = float(np.exp(-norm))
        listed = self._list(table, p, probability, limits, most_listed)
        candidate = np.where(self.alike.label >= 0, 0.0, self.rate)
        start = 0
        for w in table.weights:
            n, s = w.rows.shape
            np.add.at(candidate, w.rows.ravel(), np.repeat(probability[start : start + n], s))
            start += n
        objective = float(p @ p)
        word = evidence_word(objective, self.checks, level)
        fewest = min((e.faults for e in listed if e.survives), default=None)
        return Explanations(
            evidence=word,
            objective=objective,
            checks=self.checks,
            p_value=float(chdtrc(self.checks, objective)) if self.checks else float("nan"),
            level=level,
            max_faults=self.max_faults,
            none=none,
            listed=listed,
            candidate=candidate,
            at_least=0 if word in (Evidence.AGREES, Evidence.NO_CHECK) else fewest,
            alike=self.alike,
            evaluated=probability.size + 1,
            exhaustive=self.exhaustive,
            complete_to=complete_to,
            unexplored=unexplored,
            prior_beyond=self.prior_beyond,
        )

    # ------------------------------------------------------------------ the list

    def _list(self, table: _Table, p: Array, probability: Array, limits: Array, most: int) -> tuple[Explanation, ...]:
        n = len(table.spans.sets)
        if n == 0:
            return ()
        total = np.bincount(table.span_of, weights=probability, minlength=n)
        leftover, _ = table.spans.fit(p, self.alike.units)
        order = np.concatenate([np.full(ids.size, rows.shape[1]) for ids, rows, _ in table.spans.blocks])
        fits = ~(leftover > limits[order] * (1 + 1e-12))  # no limit: nothing contradicts it
        smallest = order[fits].min(initial=self.max_faults + 1)
        needed = float(p @ p) > limits[0]
        rank = np.lexsort((np.arange(n), leftover, -np.round(total, 12)))
        wanted = (order == 1) | (fits & (order == smallest))
        wanted[rank[:most]] = True
        members_of: dict[int, list[int]] = {}
        for i in np.flatnonzero(wanted[table.span_of] & table.spanning):
            members_of.setdefault(int(table.span_of[i]), []).append(int(i))
        made: list[tuple[Explanation, Array]] = []
        for span in sorted(np.flatnonzero(wanted).tolist(), key=lambda i: order[i]):
            members = [self._member(table.raw[i], p, float(probability[i])) for i in members_of[span]]
            members.sort(key=lambda m: (not m.allowed, -m.probability, m.candidates))
            s = int(order[span])
            survives = bool(fits[span]) and any(m.allowed for m in members)
            space = basis(self.alike.units[:, list(table.spans.sets[span][0])]) if survives else np.zeros((0, 0))
            minimal = (
                survives
                and needed
                and not any(e.faults < s and e.survives and _inside(smaller, space) for e, smaller in made)
            )
            own = sum(m.probability for m in members)
            made.append(
                (
                    Explanation(
                        faults=s,
                        members=tuple(members),
                        leftover=float(leftover[span]),
                        checks_left=self.checks - s,
                        limit=float(limits[s]),
                        p_value=float(chdtrc(self.checks - s, leftover[span])) if s < self.checks else float("nan"),
                        survives=survives,
                        minimal=minimal,
                        probability=float(total[span]),
                        with_more=max(0.0, float(total[span]) - own),
                    ),
                    space,
                )
            )
        place = {int(span): i for i, span in enumerate(rank)}
        numbers = sorted(np.flatnonzero(wanted).tolist(), key=lambda i: order[i])
        ranked = sorted(zip(numbers, made, strict=True), key=lambda pair: place[pair[0]])
        return tuple(e for _, (e, _) in ranked)

    def _member(self, candidates: Set, p: Array, probability: float) -> FaultSet:
        index = np.array(candidates)
        norms = self.alike.norms[index]
        sizes, covariance = _least_squares(self.signatures[:, index] / norms, p)
        sides = self.sides[index]
        # A size of zero but for rounding has either sign.
        allowed = bool(np.all(sides * sizes >= -1e-9 * np.sqrt(np.diag(covariance))))
        rest = self.signatures[:, index] @ (sizes / norms)
        leftover = float((p - rest) @ (p - rest))
        at_bound: Set = ()
        if not allowed:
            leftover, at_bound = self._bounded(index, p)
        return FaultSet(
            candidates, sizes / norms, covariance / np.outer(norms, norms), probability, allowed, at_bound, leftover
        )

    def _bounded(self, index: Ints, p: Array) -> tuple[float, Set]:
        """Least squares with the right signs: the best of the fits on subsets that have them."""
        best: tuple[float, Set] = (np.inf, ())
        one_sided = [int(i) for i in index if self.sides[i] != 0]
        for at_zero in choose_all(one_sided, len(one_sided)):
            keep = [int(i) for i in index if i not in at_zero]
            f = self.signatures[:, keep] / self.alike.norms[keep]
            sizes = _least_squares(f, p)[0] if keep else np.zeros(0)
            if np.all(self.sides[keep] * sizes >= 0):
                leftover = float(np.sum((p - f @ sizes) ** 2))
                if leftover < best[0]:
                    best = leftover, at_zero
        return best


def _least_squares(columns: Array, p: Array) -> tuple[Array, Array]:
    q, r = np.linalg.qr(columns)
    inverse = np.linalg.inv(r)
    return inverse @ (q.T @ p), inverse @ inverse.T


def _inside(small: Array, large: Array) -> bool:
    return bool(np.linalg.norm(small - large @ (large.T @ small)) <= ANGLE)


def explanations(
    parity: Array,
    signatures: Array,
    *,
    sides: npt.ArrayLike = 0,
    fault_rate: npt.ArrayLike,
    size_prior: npt.ArrayLike,
    max_faults: int,
    level: float = 0.05,
    limit_on_sets: int = 200_000,
    scale: npt.ArrayLike | None = None,
    saturated: bool = False,
) -> Explanations:
    """Explain one parity vector; for several of one network prepare an `Explainer` once.

    Parameters
    ----------
    parity : ndarray, shape (r,)
    signatures, sides, fault_rate, size_prior, max_faults, limit_on_sets, scale, saturated
        See `Explainer`.
    level : float
        Of the chi-squared tests.

    Returns
    -------
    Explanations
    """
    explainer = Explainer(
        signatures,
        sides=sides,
        fault_rate=fault_rate,
        size_prior=size_prior,
        max_faults=max_faults,
        limit_on_sets=limit_on_sets,
        scale=scale,
        saturated=saturated,
    )
    return explainer.explain(parity, level=level)
