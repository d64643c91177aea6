"""The adjuster for networks of up to a few thousand variables: one factorisation, everything after from it.

Notation: measured variables y (n), sigma (n,), balances A x = b with unmeasured ones projected out and brought
to the form ``K x = k``; ``B = (K diag(sigma))'`` (n x r) with rows sorted by falling sigma and
``B[:, p] = Q R``, ``Q = [Q1 Q2]`` complete. Then

* parity vector ``t = R^-T (K y - k)[p]``, t ~ N(0, I_r) when nothing is wrong;
* adjusted values ``x = y - sigma * (Q1 t)``, objective ``t't ~ chi2(r)``;
* covariance of the adjusted values ``diag(sigma) Q2 Q2' diag(sigma)``: from Q2, since ``1 - |Q1|^2`` cancels
  where a meter is far worse than its balances; test statistics from Q1, since ``1 - |Q2|^2`` cancels where a
  meter is hardly checked (Householder QR with row sorting and column pivoting: Cox & Higham 1998).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cached_property, partial

import numpy as np
import numpy.typing as npt
from scipy.linalg import qr, solve_triangular

from .eliminate import Elimination, balanced_scales, cleaned, eliminate, independent_form
from .sharp import SharpForm

__all__ = ["Adjuster", "prepare"]

Array = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]

LARGE_MULTIPLIER = 1e3
"""Balances of comparable size that are multiplied by more than this cancel each other: more digits are needed."""


@dataclass(frozen=True)
class Adjuster:
    """A network prepared for adjusting any number of snapshots of readings with these sigmas.

    Attributes
    ----------
    sigma : ndarray, shape (n,)
        Standard uncertainty of each reading.
    form, transform : ndarray, shapes (r, n) and (r, m)
        Independent balances over measured variables, and what makes them from the m original rows.
    q1, q2 : ndarray, shapes (n, r) and (n, n - r)
        The orthogonal factor.
    triangle : ndarray, shape (r, r)
        Upper triangular factor R.
    order : ndarray of int, shape (r,)
        Column order of the factorisation.
    pivots : ndarray of int, shape (r,)
        Measured variables of the identity block of `form`: those that are known worst.
    elimination : Elimination
        What was done with the unmeasured variables.
    measured : ndarray, shape (m, n)
        Columns of the measured variables in the original rows.
    redundant : ndarray of bool, shape (n,)
        Whether anything would notice an error of the reading.
    freed : ndarray of int
        Readings that are treated as absent (unknown bias).
    through : ndarray, shape (n_u, n)
        ``u = offset - through @ x``, not using the pivots: large spreads would cancel only to rounding.
    drift : ndarray, shape (n, d)
        Directions in which absent readings leave the measured variables undetermined.
    turn, gain : ndarray
        Parity space and spread that absent readings leave.
    debias : ndarray, shape (number freed, r)
        Biases of the absent readings, in sigmas, from a parity vector.
    sharp : callable or None
        From right-hand sides of the original rows, (m,), offset and target where `transform` would lose digits.
    """

    sigma: Array
    form: Array
    transform: Array
    q1: Array
    q2: Array
    triangle: Array
    order: npt.NDArray[np.int64]
    pivots: npt.NDArray[np.int64]
    elimination: Elimination
    measured: Array
    redundant: Bools
    freed: npt.NDArray[np.int64]
    through: Array
    drift: Array
    turn: Array
    debias: Array
    gain: Array
    sharp: Callable[[Array], tuple[Array, Array]] | None = None

    @property
    def checks(self) -> int:
        """Degrees of freedom r: how many independent ways the readings are checked."""
        return self.turn.shape[1]

    # ------------------------------------------------------------------ evidence

    @cached_property
    def _rows_to_whole_parity(self) -> Array:
        """The same as `rows_to_parity` with every reading there, before absent ones are projected out."""
        return np.asarray(solve_triangular(self.triangle, self.transform[self.order], trans="T"))

    @cached_property
    def rows_to_parity(self) -> Array:
        """Matrix W, shape (r, m): a closure vector of the original rows times W is the parity vector."""
        return self.turn.T @ self._rows_to_whole_parity

    @cached_property
    def signatures(self) -> Array:
        """Parity shift per unit bias of each reading, shape (r, n); zero where nothing checks it or it is absent."""
        out = (self.q1 @ self.turn).T / self.sigma
        out[:, ~self.redundant] = 0.0
        return out

    def signature_of_columns(self, columns: Array) -> Array:
        """Parity shift per unit of variables that are zero when nothing is wrong.

        Parameters
        ----------
        columns : ndarray, shape (m, k)
            Their columns in the original rows.

        Returns
        -------
        ndarray, shape (r, k)
        """
        out = -self.rows_to_parity @ columns
        # What is only rounding is zero: judged against the terms it is the sum of, absent readings still among them.
        terms = np.linalg.norm(np.abs(self._rows_to_whole_parity) @ np.abs(columns), axis=0)
        out[:, np.linalg.norm(out, axis=0) <= 1e-10 * terms] = 0.0
        return out

    @cached_property
    def cover(self) -> Array:
        """Factor F of the covariance of the measured variables, shape (n, q): cov = F F'."""
        base = self.sigma[:, None] * self.q2
        return base if self.gain.size == 0 else np.hstack([base, base @ self.gain])

    @cached_property
    def cover_unmeasured(self) -> Array:
        """Factor of the covariance of the unmeasured variables, shape (n_u, q), same columns as `cover`."""
        return -self.through @ self.cover

    # ------------------------------------------------------------------ adjustment

    def adjust(self, readings: Array, rhs: Array) -> tuple[Array, Array]:
        """Adjust snapshots.

        Parameters
        ----------
        readings : ndarray, shape (N, n)
            One row per snapshot; entries of absent readings are ignored.
        rhs : ndarray, shape (m,)
            Right-hand side of the original rows.

        Returns
        -------
        adjusted : ndarray, shape (N, n)
        parity : ndarray, shape (N, r)
        """
        y = np.array(readings, dtype=float, ndmin=2)
        if self.freed.size:
            y[:, self.freed] = np.where(np.isfinite(y[:, self.freed]), y[:, self.freed], 0.0)
        _, target = self._constants(rhs)
        t = self._parity(y, target)
        if self.freed.size:
            # An absent reading is a reading with an unknown bias: remove the bias that the checks ask for.
            y[:, self.freed] -= (self.debias @ t).T * self.sigma[self.freed]
            t = self._parity(y, target)
        x = y - (self.q1 @ t).T * self.sigma
        x -= (self.q1 @ self._parity(x, target)).T * self.sigma
        return x, (self.turn.T @ t).T

    def _parity(self, y: Array, target: Array) -> Array:
        residual = self.form @ y.T - target[:, None]
        return solve_triangular(self.triangle, residual[self.order], trans="T")

    def _constants(self, rhs: Array) -> tuple[Array, Array]:
        """Offset of the unmeasured variables, shape (n_u,), and right-hand side of `form`, shape (r,)."""
        if self.sharp is not None:
            return self.sharp(rhs)
        target = self.transform @ rhs
        return self.elimination.recover @ rhs - self._through_pivots @ target, target

    @cached_property
    def _through_pivots(self) -> Array:
        return self.elimination.recover @ self.measured[:, self.pivots]

    def unmeasured(self, adjusted: Array, rhs: Array) -> Array:
        """Values of the unmeasured variables, shape (N, n_u); undetermined directions are set to zero."""
        offset, _ = self._constants(rhs)
        return offset - np.atleast_2d(adjusted) @ self.through.T

    @property
    def undetermined(self) -> Bools:
        """Measured variables that an absent reading leaves undetermined, shape (n,)."""
        return np.any(self.drift != 0, axis=1)

    @cached_property
    def observable(self) -> Bools:
        """Whether each unmeasured variable is determined, absent readings considered, shape (n_u,)."""
        reach = np.abs(self.through @ self.drift)
        terms = np.abs(self.through) @ np.abs(self.drift)
        return self.elimination.observable & ~np.any(reach > 1e-9 * terms, axis=1)

    # ------------------------------------------------------------------ readings that are not there

    def without(self, absent: npt.ArrayLike) -> Adjuster:
        """Treat readings as absent: each is a reading with an unknown bias, projected out of the evidence.

        Parameters
        ----------
        absent : array of int or bool
            Which readings.

        Returns
        -------
        Adjuster
            Shares the factorisation; has fewer checks.
        """
        index = np.asarray(absent)
        index = np.flatnonzero(index) if index.dtype == bool else index.astype(np.int64)
        if self.freed.size:
            raise ValueError("start from the adjuster of the complete set of readings")
        if index.size == 0:
            return self
        own = self.q1[index]  # (k, r): scaled by sigma each row is a signature
        norm = np.linalg.norm(own, axis=1)
        seen = self.redundant[index] & (norm > 0)
        unit = own / np.where(seen, norm, 1.0)[:, None]
        unit[~seen] = 0.0
        u, s, vt = np.linalg.svd(unit, full_matrices=True)
        rank = int(np.sum(s > 1e-7 * max(1.0, s[0] if s.size else 0.0)))
        turn = vt[rank:].T
        # What no check sees has only rounding for a signature, and an inverse of rounding is garbage: zero instead.
        debias = (u[:, :rank] / s[:rank]) @ vt[:rank] / np.where(seen, norm, 1.0)[:, None]
        gain = self.q2[index].T @ debias
        # Directions of bias that no check sees leave everything that depends on them undetermined.
        lost = u[:, rank:] / np.where(seen, norm, 1.0)[:, None]
        lost /= np.linalg.norm(lost, axis=0)
        drift = np.zeros((self.sigma.size, lost.shape[1]))
        drift[index] = self.sigma[index, None] * np.where(np.abs(lost) > 1e-7, lost, 0.0)
        left = np.linalg.norm(self.q1 @ turn, axis=1) ** 2
        whole = np.linalg.norm(self.q1, axis=1) ** 2
        redundant = self.redundant & (left > 1e-10 * whole)
        redundant[index] = False
        return replace(self, redundant=redundant, freed=index, drift=drift, turn=turn, debias=debias, gain=gain)


def prepare(measured: Array, unmeasured: Array, sigma: Array) -> Adjuster:
    """Factorise a network once.

    Parameters
    ----------
    measured : ndarray, shape (m, n)
        Columns of the measured variables in the (linearised) balances.
    unmeasured : ndarray, shape (m, n_u)
        Columns of the unmeasured variables.
    sigma : ndarray, shape (n,)
        Standard uncertainties of the readings, above zero; shared errors are extra variables, so this is all.

    Returns
    -------
    Adjuster

    Raises
    ------
    ValueError
        If a sigma is not above zero or a coefficient is not finite.
    """
    if not np.all(np.isfinite(measured)) or not np.all(np.isfinite(unmeasured)):
        raise ValueError("a coefficient of the balances is not a finite number")
    if not np.all(sigma > 0) or not np.all(np.isfinite(sigma)):
        raise ValueError("every sigma must be a finite number above zero")
    sigma = np.asarray(sigma, dtype=float)
    n = measured.shape[1]
    rows, columns = balanced_scales(np.hstack([measured, unmeasured]))
    unit, unit_u = columns[:n], columns[n:]
    a_m, a_u = rows[:, None] * measured * unit, rows[:, None] * unmeasured * unit_u
    elimination = eliminate(a_u)
    projected = elimination.keep @ a_m
    # What the projection only rounds to zero is zero: judged against the column it came from.
    whole = np.linalg.norm(a_m, axis=0)
    projected[:, np.linalg.norm(projected, axis=0) <= 1e-10 * whole] = 0.0
    projected[np.linalg.norm(projected, axis=1) <= 1e-10] = 0.0
    form, transform, pivots = independent_form(projected, sigma / unit)
    transform = transform @ elimination.keep
    sharp, exact = None, None
    if max(np.abs(transform).max(initial=0.0), np.abs(elimination.recover).max(initial=0.0)) > LARGE_MULTIPLIER:
        exact = SharpForm.of(a_u, elimination.pivots, a_m, pivots)
    if exact is not None:
        elimination = exact.elimination(elimination)
        through, form = exact.apply(a_m)
        transform = exact.apply(np.eye(len(a_m)))[1]
        form = cleaned(form, pivots)
        whole = np.maximum(np.abs(through).max(axis=1, initial=0.0, keepdims=True), 1.0)
        sharp = partial(exact.constants, rows=rows, above=unit_u, below=unit[pivots])
    else:
        through = elimination.recover @ a_m
        whole = np.abs(elimination.recover).max(axis=1, initial=0.0, keepdims=True) * np.abs(a_m).max(initial=0.0)
        through = through - through[:, pivots] @ form
    through[np.abs(through) < 1e-14 * whole] = 0.0
    redundant = np.any(form != 0, axis=0)
    form = unit[pivots, None] * form / unit
    transform = unit[pivots, None] * transform * rows
    through = unit_u[:, None] * through / unit
    elimination = replace(
        elimination,
        keep=elimination.keep * rows,
        recover=unit_u[:, None] * elimination.recover * rows,
        null=unit_u[:, None] * elimination.null,
    )
    r = form.shape[0]
    by_sigma = np.argsort(-sigma, kind="stable")
    q, upper, order = qr((form * sigma).T[by_sigma], pivoting=True) if r else (np.eye(n), np.zeros((n, 0)), [])
    back = np.argsort(by_sigma)
    q = np.asarray(q)[back]
    return Adjuster(
        sigma=sigma,
        form=form,
        transform=transform,
        q1=q[:, :r],
        q2=q[:, r:],
        triangle=upper[:r],
        order=np.asarray(order, dtype=np.int64),
        pivots=pivots,
        elimination=elimination,
        measured=measured,
        redundant=redundant,
        freed=np.zeros(0, dtype=np.int64),
        through=through,
        drift=np.zeros((n, 0)),
        turn=np.eye(r),
        debias=np.zeros((0, r)),
        gain=np.zeros((n - r, 0)),
        sharp=sharp,
    )
