"""A second opinion that outliers pull less: robust adjustment of many snapshots on one projector.

Everything is in units of the sigmas. With parity vectors ``t`` and ``G`` (n x r, orthonormal columns: signatures times
sigmas) the least-squares residuals are ``G t``, and the residuals of any values that satisfy the balances are the
``e`` with ``G'e = t``. A robust estimate minimises ``sum rho(e_i)`` over those (Huber 1964, Ann. Math. Stat. 35, 73; Welsch
as in Dennis & Welsch 1978; Hampel's three-part function as in Andrews et al. 1972; citations from memory). At an optimum
``psi(e)`` lies in the range of G, and that is what is checked: a small step is no proof of it.

Huber's convex problem is solved exactly. Its solution is least squares with some readings shifted, each only if its
score stands at the bend; the set of shifted readings is found by exchanging members, and by Newton's method on the
piecewise quadratic loss for the few snapshots where that does not settle. Welsch and Hampel are not convex: reweighting from the Huber solution never goes uphill, and Newton steps finish.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

__all__ = ["HAMPEL", "HUBER", "WELSCH", "Loss", "Robust", "hampel", "huber", "psi", "rho", "robust", "welsch"]

Array = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]
Ints = npt.NDArray[np.int64]
Loss = Literal["huber", "welsch", "hampel"]

HUBER = 1.345
"""Bend in sigmas: 95 % efficiency at the normal distribution (Holland & Welsch 1977)."""

WELSCH = 2.9846
"""Width in sigmas, for the same efficiency (Holland & Welsch 1977, rounded there to 2.985)."""

HAMPEL = (2.0, 4.0, 8.0)
"""Bends in sigmas: full weight, constant influence, falling influence, none (a customary choice)."""

TOLERANCE = 1e-9
_WEIGHT_FLOOR = 1e-13
_EXCHANGES = 12
_SLACK = 1e-10
_CHUNK = 4096


@dataclass(frozen=True)
class Robust:
    """Robust estimates of N snapshots.

    Attributes
    ----------
    residual : ndarray, shape (N, n)
        Reading minus robust value, in sigmas.
    shift : ndarray, shape (N, n)
        What the readings would have to be lowered by, in sigmas, for least squares to give the same values.
    violation : ndarray, shape (N,)
        Largest violation of the optimality conditions, in sigmas.
    unique : ndarray of bool, shape (N,)
        False where other values have the same Huber loss: readings at the bend whose signatures are dependent can
        share a gross error in more than one way. True for the other losses, whose optimum is a local one anyway.
    steps : int
        Rounds that the slowest snapshot needed.
    """

    residual: Array
    shift: Array
    violation: Array
    unique: Bools
    steps: int

    @property
    def optimal(self) -> Bools:
        """Whether each snapshot fulfils the conditions to `1e-7` sigma."""
        return self.violation <= 1e-7


def rho(residual: Array, loss: Loss) -> Array:
    """Loss of each residual, ``e^2 / 2`` for small ones."""
    e = np.abs(residual)
    if loss == "huber":
        return np.where(e <= HUBER, 0.5 * e**2, HUBER * e - 0.5 * HUBER**2)
    if loss == "welsch":
        return np.asarray(-0.5 * WELSCH**2 * np.expm1(-((e / WELSCH) ** 2)))
    a, b, c = HAMPEL
    middle, top = a * e - 0.5 * a**2, a * b - 0.5 * a**2 + 0.5 * a * (c - b)
    falling = top - 0.5 * a * (c - e) ** 2 / (c - b)
    return np.select([e <= a, e <= b, e <= c], [0.5 * e**2, middle, falling], top)


def psi(residual: Array, loss: Loss) -> Array:
    """Derivative of the loss: the influence of each residual."""
    return np.asarray(residual * _weight(np.abs(residual), loss))


def _weight(e: Array, loss: Loss) -> Array:
    safe = np.maximum(e, 1e-300)
    if loss == "huber":
        return np.minimum(1.0, HUBER / safe)
    if loss == "welsch":
        return np.asarray(np.exp(-((e / WELSCH) ** 2)))
    a, b, c = HAMPEL
    return np.select([e <= a, e <= b, e <= c], [np.ones_like(e), a / safe, a * (c - e) / ((c - b) * safe)], 0.0)


def _curvature(e: Array, loss: Loss) -> Array:
    if loss == "welsch":
        q = (e / WELSCH) ** 2
        return np.asarray((1.0 - 2.0 * q) * np.exp(-q))
    a, b, c = HAMPEL
    return np.select([e <= a, e <= b, e <= c], [1.0, 0.0, -a / (c - b)], 0.0)


def robust(parity: Array, projector: Array, loss: Loss = "huber") -> Robust:
    """Estimate many snapshots robustly.

    Parameters
    ----------
    parity : ndarray, shape (N, r)
    projector : ndarray, shape (n, r)
        G, orthonormal columns; rows of readings that nothing checks are zero.
    loss : {"huber", "welsch", "hampel"}

    Returns
    -------
    Robust
    """
    return {"huber": huber, "welsch": welsch, "hampel": hampel}[loss](parity, projector)


# ------------------------------------------------------------------ Huber


def huber(parity: Array, projector: Array) -> Robust:
    """Exact minimum of Huber's loss, see `robust`."""
    t, g = np.asarray(parity, dtype=float), np.asarray(projector, dtype=float)
    residual, steps = t @ g.T, 0
    matrix = g @ g.T
    free = _free_directions(g)
    for start in range(0, len(t), _CHUNK):
        rows = np.arange(start, min(start + _CHUNK, len(t)))
        score = residual[rows]
        shift, left, used = _exchange(score, matrix)
        residual[rows] += shift - shift @ matrix
        if left.size:
            residual[rows[left]], more = _newton(score[left], free)
            used += more
        steps = max(steps, used)
    shift = residual - psi(residual, "huber")
    return Robust(residual, shift, _violation(residual, t, g, "huber"), _unique(residual, g), steps)


def _unique(residual: Array, g: Array) -> Bools:
    """Whether the signatures of the readings at the bend or beyond are independent, shape (N,)."""
    out = np.ones(len(residual), dtype=bool)
    beyond = (np.abs(residual) >= HUBER - 1e-9) & (np.linalg.norm(g, axis=1) > 1e-12)
    size = beyond.sum(axis=1)
    out[size > g.shape[1]] = False
    for k in np.unique(size[(size > 1) & (size <= g.shape[1])]):
        rows = np.flatnonzero(size == k)
        chosen = g[np.nonzero(beyond[rows])[1].reshape(-1, k)]
        unit = chosen / np.linalg.norm(chosen, axis=2, keepdims=True)
        out[rows] = np.linalg.svd(unit, compute_uv=False)[:, -1] > 1e-6
    return out


def _free_directions(g: Array) -> Array:
    """Directions in which residuals of checked readings may move without leaving the balances."""
    seen = np.flatnonzero(np.linalg.norm(g, axis=1) > 1e-12)
    q, _ = np.linalg.qr(g[seen], mode="complete") if g.shape[1] else (np.eye(seen.size), None)
    out = np.zeros((g.shape[0], seen.size - g.shape[1]))
    out[seen] = q[:, g.shape[1] :]
    return out


def _exchange(score: Array, matrix: Array) -> tuple[Array, Ints, int]:
    """Shifts that keep every score within the bend, found by exchanging the set of shifted readings.

    A reading is shifted only while its score stands at the bend on the side of its shift.

    Returns
    -------
    shift : ndarray, shape (N, n)
    left : ndarray of int
        Rows for which a few exchanges did not settle it; their shifts are zero.
    rounds : int
    """
    # The largest score first: an outlier lifts the scores of sound readings with it.
    size = np.abs(score)
    sign = np.where((size > HUBER + _SLACK) & (size >= 0.5 * size.max(axis=1, keepdims=True)), np.sign(score), 0.0)
    shift = np.zeros_like(score)
    open_ = np.flatnonzero(sign.any(axis=1))
    rounds = 0
    while open_.size and rounds < _EXCHANGES:
        rounds += 1
        shift[open_] = _solve_sets(score[open_], sign[open_], matrix)
        now = score[open_] - shift[open_] @ matrix
        leaves = (sign[open_] != 0) & (shift[open_] * sign[open_] < 0)
        joins = (sign[open_] == 0) & (np.abs(now) > HUBER + _SLACK)
        # Where more are shifted than there are checks the scores may miss the bend.
        missed = (sign[open_] != 0) & (np.abs(now - HUBER * sign[open_]) > _SLACK)
        sign[open_] = np.where(leaves, 0.0, np.where(joins, np.sign(now), sign[open_]))
        open_ = open_[(leaves | joins | missed).any(axis=1)]
    shift[open_] = 0.0
    return shift, open_, rounds


def _solve_sets(score: Array, sign: Array, matrix: Array) -> Array:
    """Shifts that bring the scores of the chosen readings to the bend, all others unshifted."""
    out = np.zeros_like(score)
    size = (sign != 0).sum(axis=1)
    for k in np.unique(size[size > 0]):
        rows = np.flatnonzero(size == k)
        at = np.nonzero(sign[rows])[1].reshape(-1, k)
        part = matrix[at[:, :, None], at[:, None, :]]
        wanted = np.take_along_axis(score[rows] - HUBER * sign[rows], at, axis=1)[:, :, None]
        try:
            found = np.linalg.solve(part, wanted)[:, :, 0]
        except np.linalg.LinAlgError:
            found = (np.linalg.pinv(part, rcond=1e-10) @ wanted)[:, :, 0]
        found[~(np.abs(found) < 1e12)] = 0.0
        out[rows[:, None], at] = found
    return out


def _newton(residual: Array, free: Array) -> tuple[Array, int]:
    """Newton's method on the piecewise quadratic loss with exact line searches: it ends on a piece (Madsen & Nielsen 1990)."""
    e = residual.copy()
    open_, step = np.arange(len(e)), 0
    ridge = 1e-9 * np.eye(free.shape[1])
    while open_.size and step < 500:
        now = e[open_]
        slope = psi(now, "huber") @ free
        rough = np.abs(slope).max(axis=1, initial=0.0) > 1e-2 * TOLERANCE
        open_, now, slope = open_[rough], now[rough], slope[rough]
        if not open_.size:
            break
        step += 1
        inlier = (np.abs(now) <= HUBER).astype(float)
        hessian = np.einsum("if,ni,ig->nfg", free, inlier, free) + ridge
        move = -np.linalg.solve(hessian, slope[:, :, None])[:, :, 0] @ free.T
        e[open_] = now + _line_search(now, move)[:, None] * move
    return e, step


def _line_search(e: Array, move: Array) -> Array:
    """Step length within 0 and 1 at which the convex loss is lowest along a direction, shape (N,)."""

    def rises(length: Array) -> Bools:
        return np.asarray((psi(e + length[:, None] * move, "huber") * move).sum(axis=1) > 0)

    high = np.ones(len(e))
    if not rises(high).any():
        return high
    low, whole = np.zeros(len(e)), ~rises(high)
    for _ in range(80):
        middle = 0.5 * (low + high)
        up = rises(middle)
        high, low = np.where(up, middle, high), np.where(up, low, middle)
    return np.where(whole, 1.0, low)


# ------------------------------------------------------------------ redescending losses


def welsch(parity: Array, projector: Array) -> Robust:
    """Stationary point of Welsch's loss that is reached downhill from the Huber estimate, see `robust`."""
    return _redescend(parity, projector, "welsch")


def hampel(parity: Array, projector: Array) -> Robust:
    """Stationary point of Hampel's loss that is reached downhill from the Huber estimate, see `robust`."""
    return _redescend(parity, projector, "hampel")


def _redescend(parity: Array, projector: Array, loss: Loss) -> Robust:
    t, g = np.asarray(parity, dtype=float), np.asarray(projector, dtype=float)
    first = huber(t, g)
    residual, steps = first.residual.copy(), 0
    free = _free_directions(g)
    for start in range(0, len(t), _CHUNK):
        rows = slice(start, start + _CHUNK)
        residual[rows], used = _downhill(residual[rows], free, loss)
        steps = max(steps, used)
    shift = residual - psi(residual, loss)
    return Robust(residual, shift, _violation(residual, t, g, loss), np.ones(len(t), dtype=bool), steps)


def _downhill(residual: Array, free: Array, loss: Loss) -> tuple[Array, int]:
    e = residual.copy()
    open_ = np.arange(len(e)) if free.shape[1] else np.zeros(0, dtype=np.int64)
    step = 0
    while open_.size and step < 1000:
        step += 1
        now = e[open_]
        size = np.abs(now)
        slope = psi(now, loss) @ free
        done = np.abs(slope).max(axis=1) <= 0.1 * TOLERANCE
        open_, now, size, slope = open_[~done], now[~done], size[~done], slope[~done]
        if not open_.size:
            break
        before = rho(now, loss).sum(axis=1)
        weight = np.maximum(_weight(size, loss), _WEIGHT_FLOOR)
        e[open_] = now - _along(slope, weight, free)
        if step > 3:
            # Newton where the loss is convex around here and the step goes down; reweighting elsewhere.
            curved = _curvature(size, loss)
            hessian = np.einsum("if,ni,ig->nfg", free, curved, free)
            convex = np.linalg.eigvalsh(hessian)[:, 0] > 1e-8
            if convex.any():
                move = np.linalg.solve(hessian[convex], slope[convex][:, :, None])[:, :, 0]
                tried = now[convex] - move @ free.T
                lower = rho(tried, loss).sum(axis=1) <= before[convex] * (1 + 1e-14)
                flatter = np.abs(psi(tried, loss) @ free).max(axis=1) <= 0.5 * np.abs(slope[convex]).max(axis=1)
                rows = np.flatnonzero(convex)[lower & flatter]
                e[open_[rows]] = tried[lower & flatter]
    return e, step


def _along(slope: Array, weight: Array, free: Array) -> Array:
    """Step of reweighted least squares, shape (N, n)."""
    normal = np.einsum("if,ni,ig->nfg", free, weight, free)
    try:
        move = np.linalg.solve(normal, slope[:, :, None])[:, :, 0]
    except np.linalg.LinAlgError:
        move = (np.linalg.pinv(normal, rcond=1e-14) @ slope[:, :, None])[:, :, 0]
    return np.asarray(move @ free.T)


def _violation(residual: Array, t: Array, g: Array, loss: Loss) -> Array:
    """How far the residuals are from satisfying the balances, and their influence from the range of G."""
    influence = psi(residual, loss)
    seen = np.linalg.norm(g, axis=1) > 1e-12
    off = np.abs((influence - (influence @ g) @ g.T)[:, seen]).max(axis=1, initial=0.0)
    open_ = np.abs(residual @ g - t).max(axis=1, initial=0.0)
    return np.asarray(np.maximum(off, open_ / np.maximum(1.0, np.abs(t).max(axis=1, initial=0.0))))
