"""Are the sigmas honest? What the scatter of many parity vectors says of each reading's sigma.

When all sigmas are right a parity vector has covariance I. If the sigma of reading i is really ``phi_i`` times what was
declared it has ``I + sum_i (phi_i^2 - 1) g_i g_i'`` with ``g_i = sigma_i f_i``, the signature of one sigma; ``|g_i|^2`` is
the share of the reading that is checked. Regressing the observed covariance on the ``g_i g_i'`` to find sigmas goes back to
Almasy & Mah 1984 (Ind. Eng. Chem. Process Des. Dev. 23, 779) and Keller, Zasadzinski & Darouach 1992 (Comput. Chem.
Eng. 16, S185); here by likelihood, which for small changes is that regression with its weights. Not all of it can be
known: readings whose signatures are parallel show only the sum of their variances.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import chdtri

from .lookalike import ANGLE
from .refusal import Refusal

__all__ = [
    "LEAST_SHARE",
    "LEAST_SNAPSHOTS",
    "Audit",
    "JointFactors",
    "Scatter",
    "audit",
    "joint_factors",
    "scatter",
    "select_factors",
]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

LEAST_SNAPSHOTS = 20
"""Fewer snapshots say too little of a sigma: the factor would be uncertain by a third; a choice of this program."""

LEAST_SHARE = 0.1
"""Readings that are checked to a smaller share hardly show in the scatter; a choice of this program, no source.

A sigma that is declared far too small makes the share small as well: such a reading still counts as audited where the
scatter itself speaks against its sigma (gain above the limit) and the share at the sigma that it asks for suffices.
"""

_FACTORS = np.concatenate([[0.0], np.geomspace(1e-2, 1e3, 400)])
_STEPS = 60


@dataclass(frozen=True)
class Scatter:
    """Parity vectors that share one linearisation, summed up.

    Attributes
    ----------
    count : int
        Degrees of freedom of `moment`: the number of vectors, fewer if a mean was taken out.
    moment : ndarray, shape (r, r)
        Sum of the outer products.
    signatures : ndarray, shape (r, k)
        Of one sigma of each reading.
    snapshots : int
        Number of vectors that went in.
    """

    count: int
    moment: Array
    signatures: Array
    snapshots: int


@dataclass(frozen=True)
class Audit:
    """What the scatter says, one entry per reading where arrays have shape (k,).

    Attributes
    ----------
    count, checks : int
        Vectors, and all their checks together.
    ratio : float
        Mean square of the scatter per check; 1 when the sigmas are right.
    low, high : float
        Band in which the ratio lies with probability ``1 - level`` when they are.
    overall, overall_low, overall_high : float
        Factor by which all sigmas together would be off, with its interval.
    overall_gain : float
        Twice the gain in log likelihood from changing all sigmas by that factor.
    gain : ndarray
        The same from changing this sigma alone; nan where it cannot be audited.
    factor, factor_low, factor_high : ndarray
        Factor on the sigma if it is the only one that is wrong, and its interval; nan where it cannot be audited.
        Readings that are alike have the same gain, and each the factor that it would need alone.
    share : ndarray
        Share checked, averaged over the vectors.
    seen : ndarray of int
        Vectors that check the reading at all.
    limit : float
        For the largest gain, for the number of readings with any check (Bonferroni).
    best : int
        Reading with the largest gain, the first of those that are alike; -1 where there is none.
    alike : tuple of tuple of int
        Readings whose factors cannot be separated, because their signatures are parallel in every vector.
    """

    count: int
    checks: int
    ratio: float
    low: float
    high: float
    overall: float
    overall_low: float
    overall_high: float
    overall_gain: float
    gain: Array
    factor: Array
    factor_low: Array
    factor_high: Array
    share: Array
    seen: Ints
    limit: float
    best: int
    alike: tuple[tuple[int, ...], ...]

    @property
    def band_holds(self) -> bool:
        """Whether the scatter as a whole is what the sigmas let expect."""
        return self.low <= self.ratio <= self.high

    @property
    def change_indicated(self) -> bool:
        """Whether the whole or any one reading speaks against the sigmas."""
        return not self.band_holds or bool(np.nanmax(self.gain, initial=0.0) > self.limit)

    @property
    def auditable(self) -> npt.NDArray[np.bool_]:
        """Whether anything can be said of each reading by itself."""
        out = np.isfinite(self.gain)
        out[[i for members in self.alike for i in members]] = False
        return out


def scatter(parity: Array, signatures: Array, sigma: Array, *, about: str = "zero") -> Scatter:
    """Sum up parity vectors of one linearisation.

    Parameters
    ----------
    parity : ndarray, shape (N, r)
        In the order of time where `about` is ``pairs``.
    signatures : ndarray, shape (r, k)
        Per unit of each reading.
    sigma : ndarray, shape (k,)
    about : {"zero", "mean", "pairs"}
        What the scatter is taken about: nothing; the mean, so that a steady bias does not count; or from each
        vector to the next, in pairs that do not overlap, so that a slow drift does not count either.

    Returns
    -------
    Scatter
    """
    t = np.asarray(parity, dtype=float)
    own = signatures * sigma
    if about == "zero":
        return Scatter(len(t), t.T @ t, own, len(t))
    if about == "mean":
        t = t - t.mean(axis=0) if len(t) else t
        return Scatter(max(len(t) - 1, 0), t.T @ t, own, len(t))
    if about == "pairs":
        even = len(t) // 2 * 2
        d = (t[1:even:2] - t[0:even:2]) / np.sqrt(2.0)
        return Scatter(len(d), d.T @ d, own, len(t))
    raise Refusal("about-unknown", f"scatter is taken about zero, mean or pairs, not {about!r}")


def audit(parts: Sequence[Scatter], *, level: float = 0.05) -> Audit:
    """Compare the scatter with the sigmas.

    Parameters
    ----------
    parts : sequence of Scatter
        All with the same readings; absent readings have zero signatures.
    level : float
        Of the bands, intervals and the limit, within (0, 1).

    Returns
    -------
    Audit

    Raises
    ------
    Refusal
        Without any check, or if the level is out of range.
    """
    if not 0 < level < 1:
        raise Refusal("level-out-of-range", f"a test level lies within 0 and 1, not {level}")
    used = [p for p in parts if p.count > 0 and p.moment.shape[0] > 0]
    if not used:
        raise Refusal("no-check", "without checks nothing is known of the sigmas")
    counts = np.array([p.count for p in used], dtype=float)
    total = int(sum(p.count * p.moment.shape[0] for p in used))
    square = float(sum(np.trace(p.moment) for p in used))
    ratio = square / total
    low, high = chdtri(total, 1 - level / 2), chdtri(total, level / 2)
    # One row per part: share of each reading, and the sum of squared projections on its signature.
    share = np.array([(p.signatures**2).sum(axis=0) for p in used])
    squares = np.array([np.einsum("ri,rs,si->i", p.signatures, p.moment, p.signatures) for p in used])
    mean_share = counts @ share / counts.sum()
    count = int(counts.sum())
    seen = np.array([p.snapshots for p in used]) @ (share > 0)
    can = (mean_share > 0) & (seen >= LEAST_SNAPSHOTS)
    alike = _alike(used, np.flatnonzero(can))
    k = share.shape[1]
    gain, factor, lowest, highest = (np.full(k, np.nan) for _ in range(4))
    drop = float(chdtri(1, level))
    for i in np.flatnonzero(can):
        gain[i], factor[i], lowest[i], highest[i] = _profile(counts, share[:, i], squares[:, i], drop)
    limit = float(chdtri(1, level / max(int(np.sum(mean_share > 0)), 1)))
    with np.errstate(invalid="ignore"):
        asked = factor**2 * mean_share / (1.0 + (factor**2 - 1.0) * mean_share)
        silent = (mean_share < LEAST_SHARE) & ~((gain > limit) & (asked >= LEAST_SHARE))
    for entry in (gain, factor, lowest, highest):
        entry[silent] = np.nan
    return Audit(
        count=count,
        checks=total,
        ratio=ratio,
        low=float(low / total),
        high=float(high / total),
        overall=float(np.sqrt(ratio)),
        overall_low=float(np.sqrt(square / high)),
        overall_high=float(np.sqrt(square / low)),
        overall_gain=float(total * (ratio - 1.0 - np.log(ratio))) if ratio > 0 else np.inf,
        gain=gain,
        factor=factor,
        factor_low=lowest,
        factor_high=highest,
        share=np.clip(mean_share, 0.0, 1.0),
        seen=seen.astype(np.int64),
        limit=limit,
        best=int(np.nanargmax(gain)) if np.isfinite(gain).any() else -1,
        alike=alike,
    )


def _deviance(factor: Array, counts: Array, share: Array, squares: Array) -> Array:
    """Minus twice the log likelihood at factors, relative to a factor of one, shape of `factor`."""
    change = np.asarray(factor, dtype=float)[..., None] ** 2 - 1.0
    variance = np.maximum(1.0 + change * share, 1e-12)
    return np.asarray((counts * np.log(variance) - change / variance * squares).sum(axis=-1))


def _profile(counts: Array, share: Array, squares: Array, drop: float) -> tuple[float, float, float, float]:
    """Gain, factor and interval of one reading by likelihood; the factor is searched from 0 to 1000."""

    def at(x: Array | float) -> Array:
        return _deviance(np.asarray(x), counts, share, squares)

    def rises(x: float) -> bool:
        """Whether the deviance grows with the factor."""
        variance = np.maximum(1.0 + (x**2 - 1.0) * share, 1e-12)
        return bool((counts * share / variance - squares / variance**2).sum() > 0)

    grid = at(_FACTORS)
    best = int(grid.argmin())
    a, b = _FACTORS[max(best - 1, 0)], _FACTORS[min(best + 1, _FACTORS.size - 1)]
    for _ in range(_STEPS):
        middle = 0.5 * (a + b)
        a, b = (a, middle) if rises(middle) else (middle, b)
    top = 0.5 * (a + b) if a > 0 or not rises(0.0) else 0.0
    bottom = float(at(top))
    inside = grid <= bottom + drop
    # The ends lie between the last factor of the grid that is inside and the next.
    left = int(inside.argmax()) if inside.any() else best
    right = int(_FACTORS.size - 1 - inside[::-1].argmax()) if inside.any() else best
    low = _crossing(at, _FACTORS[left - 1], min(_FACTORS[left], top), bottom + drop) if left > 0 else 0.0
    high = (
        _crossing(at, _FACTORS[right + 1], max(_FACTORS[right], top), bottom + drop)
        if right + 1 < _FACTORS.size
        else np.inf
    )
    return max(-bottom, 0.0), float(top), float(low), float(high)


def _crossing(at: Callable[[float], Array], outside: float, inside: float, level: float) -> float:
    """Factor between two at which the deviance crosses a level."""
    for _ in range(_STEPS):
        middle = 0.5 * (outside + inside)
        if at(middle) > level:
            outside = middle
        else:
            inside = middle
    return inside


def _alike(parts: Sequence[Scatter], among: Ints) -> tuple[tuple[int, ...], ...]:
    """Readings whose signatures are parallel in every part."""
    if among.size < 2:
        return ()
    same = np.ones((among.size, among.size), dtype=bool)
    for p in parts:
        own = p.signatures[:, among]
        norm = np.linalg.norm(own, axis=0)
        cosine = np.abs(own.T @ own) / np.maximum(np.outer(norm, norm), 1e-300)
        same &= (cosine >= 1.0 - ANGLE**2 / 2) | (np.outer(norm, norm) == 0)
    out, taken = [], np.zeros(among.size, dtype=bool)
    for i in range(among.size):
        members = np.flatnonzero(same[i] & ~taken)
        if not taken[i] and members.size > 1:
            out.append(tuple(int(among[m]) for m in members))
            taken[members] = True
    return tuple(out)


@dataclass(frozen=True)
class JointFactors:
    """Factors of several readings estimated together.

    Attributes
    ----------
    readings : tuple of int
    factor, sigma : ndarray, shape (s,)
        Factor on each sigma, and its standard uncertainty (of the factor, first order); nan where not separable.
    separable : bool
        Whether the scatter determines all of them.
    gain : float
        Twice the gain in log likelihood over the declared sigmas.
    """

    readings: tuple[int, ...]
    factor: Array
    sigma: Array
    separable: bool
    gain: float


def joint_factors(parts: Sequence[Scatter], readings: Sequence[int], *, steps: int = 200) -> JointFactors:
    """Estimate the factors of several readings together, by Fisher scoring of the likelihood.

    Parameters
    ----------
    parts : sequence of Scatter
    readings : sequence of int
    steps : int
        Most steps.

    Returns
    -------
    JointFactors
        Not separable where the ``g_i g_i'`` are linearly dependent, or nearly so (condition above 1e8).
    """
    chosen = list(readings)
    used = [p for p in parts if p.count > 0 and p.moment.shape[0] > 0]
    change = np.zeros(len(chosen))
    value, slope, fisher = _likelihood(used, chosen, change)
    scale = np.sqrt(np.maximum(np.diag(fisher), 1e-300))
    spectrum = np.linalg.eigvalsh(fisher / np.outer(scale, scale)) if chosen else np.ones(1)
    nothing = np.full(len(chosen), np.nan)
    if spectrum.min() <= 1e-8 * spectrum.max():
        return JointFactors(tuple(chosen), nothing, nothing, False, 0.0)
    for _ in range(steps):
        step = np.linalg.solve(fisher, slope)
        length = 1.0
        while length > 1e-10:
            tried = np.maximum(change + length * step, -1.0 + 1e-9)
            new = _likelihood(used, chosen, tried)
            if new[0] <= value + 1e-12 * abs(value):
                break
            length *= 0.5
        moved = float(np.abs(tried - change).max(initial=0.0))
        if length <= 1e-10:
            break
        change, (value, slope, fisher) = tried, new
        if moved < 1e-11 * (1.0 + float(np.abs(change).max(initial=0.0))):
            break
    factor = np.sqrt(1.0 + change)
    covariance = np.linalg.inv(fisher)
    start = _likelihood(used, chosen, np.zeros(len(chosen)))[0]
    return JointFactors(tuple(chosen), factor, np.sqrt(np.diag(covariance)) / (2.0 * factor), True, start - value)


def _likelihood(parts: Sequence[Scatter], chosen: list[int], change: Array) -> tuple[float, Array, Array]:
    """Minus twice the log likelihood, half its descent direction's slope, and the Fisher information of the changes."""
    value, slope, fisher = 0.0, np.zeros(len(chosen)), np.zeros((len(chosen), len(chosen)))
    for p in parts:
        g = p.signatures[:, chosen]
        covariance = np.eye(p.moment.shape[0]) + (g * change) @ g.T
        _, logdet = np.linalg.slogdet(covariance)
        whitened = np.linalg.solve(covariance, g)
        middle = np.linalg.solve(covariance, p.moment)
        value += p.count * logdet + np.trace(middle)
        inner = g.T @ whitened
        slope += 0.5 * (np.einsum("ri,rs,si->i", whitened, p.moment, whitened) - p.count * np.diag(inner))
        fisher += 0.5 * p.count * inner**2
    return float(value), slope, fisher


def select_factors(parts: Sequence[Scatter], found: Audit) -> JointFactors:
    """Readings whose sigmas have to change together: one more at a time while that gains more than the limit.

    Parameters
    ----------
    parts : sequence of Scatter
    found : Audit
        Of the same parts.

    Returns
    -------
    JointFactors
        Of no reading where no change is indicated by any.
    """
    chosen: list[int] = []
    best = joint_factors(parts, chosen)
    # Of readings that are alike the first stands for all.
    others = {i for members in found.alike for i in members[1:]}
    open_ = [int(i) for i in np.flatnonzero(np.isfinite(found.gain)) if i not in others]
    while open_:
        tried = [joint_factors(parts, [*chosen, i]) for i in open_]
        top = max(tried, key=lambda j: j.gain)
        if not top.separable or top.gain - best.gain <= found.limit:
            break
        best, chosen = top, list(top.readings)
        open_.remove(chosen[-1])
    return best
