"""How probable a set of faults makes the evidence, sizes integrated out.

With prior sizes b ~ N(0, D) the parity vector of a set S is ``p ~ N(0, I + F_S D F_S')``, a closed form; a one-sided
size has the half-normal prior, which multiplies it by two and by the probability that the posterior has the right
sign. Weighted with the prior of the set, prod(rate) prod(1 - rate), this is the Bayesian approach to gross errors
(Tamhane, Iordache & Mah 1988, Chemometrics Intell. Lab. Syst. 4, 33), here with any signatures and sizes.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .orthant import log_orthant

__all__ = ["Weights", "log_symmetric_sums", "prepare_weights"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Weights:
    """Sets of one number of faults, prepared for any parity vector.

    Attributes
    ----------
    rows : ndarray of int, shape (n, s)
        Candidates of each set.
    inverse : ndarray, shape (n, s, s)
        ``(I + E'E)^-1`` with E the signatures times the prior standard deviations.
    constant : ndarray, shape (n,)
        Logarithm of all that does not depend on the evidence.
    sided : ndarray of bool, shape (n, s)
        Which sizes are one-sided.
    scale : ndarray, shape (n, s)
        Prior standard deviation of each size, times the sign it must have.
    """

    rows: Ints
    inverse: Array
    constant: Array
    sided: npt.NDArray[np.bool_]
    scale: Array

    def log_weight(self, h: Array) -> Array:
        """Logarithm of posterior weight relative to no fault at all.

        Parameters
        ----------
        h : ndarray, shape (k,)
            Products of the signatures with the parity vector.

        Returns
        -------
        ndarray, shape (n,)
        """
        c = self.scale * h[self.rows]
        mean = np.einsum("nij,nj->ni", self.inverse, c)
        out = self.constant + 0.5 * np.einsum("ni,ni->n", c, mean)
        count = self.sided.sum(axis=1)
        for q in range(1, self.rows.shape[1] + 1):
            which = np.flatnonzero(count == q)
            if which.size == 0:
                continue
            at = np.nonzero(self.sided[which])[1].reshape(-1, q)
            n = which[:, None]
            # In units of the prior the posterior is N(mean, inverse), and the right sign is positive.
            out[which] += log_orthant(mean[n, at], self.inverse[which[:, None, None], at[:, :, None], at[:, None, :]])
        return out


def prepare_weights(rows: Ints, signatures: Array, sides: Ints, log_odds: Array, size_prior: Array) -> Weights:
    """Prepare sets of one number of faults.

    Parameters
    ----------
    rows : ndarray of int, shape (n, s)
    signatures : ndarray, shape (r, k)
    sides : ndarray of int, shape (k,)
        Sign that the size must have; 0 for either.
    log_odds : ndarray, shape (k,)
        ``log(rate / (1 - rate))``.
    size_prior : ndarray, shape (k,)
        Standard deviation of the prior of the size.

    Returns
    -------
    Weights
    """
    scale = size_prior * np.where(sides == 0, 1, sides)
    scaled = signatures * scale
    gram = scaled.T @ scaled
    s = rows.shape[1]
    matrix = gram[rows[:, :, None], rows[:, None, :]] + np.eye(s)
    _, logdet = np.linalg.slogdet(matrix)
    sided = sides[rows] != 0
    constant = log_odds[rows].sum(axis=1) - 0.5 * logdet + sided.sum(axis=1) * np.log(2.0)
    inverse = np.asarray(np.linalg.inv(matrix), dtype=np.float64)
    return Weights(rows, inverse, constant, sided, scale[rows])


def log_symmetric_sums(log_values: Sequence[float] | Array, most: int) -> Array:
    """Logarithms of the elementary symmetric sums e_0 .. e_most: total prior weight of all sets of each size."""
    out = np.full(most + 1, -np.inf)
    out[0] = 0.0
    for value in log_values:
        out[1:] = np.logaddexp(out[1:], out[:-1] + value)
    return out
