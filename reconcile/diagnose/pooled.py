"""Evidence of many snapshots pooled: a fault too small for one snapshot shows in the mean of many.

A steady fault of size b moves the parity vector of every snapshot, ``t_s ~ N(F_g b, I)`` with the signatures F_g of its
linearisation g. With the same readings in all of N snapshots the mean has covariance I/N. With different readings
absent each g has its own checks; what they say of b together is the information ``sum N_g F_g'F_g``, brought here to
one parity vector ``p ~ N(F b, I)`` with the fewest rows that carry all of it, so that everything that explains one
snapshot explains the pool.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .critical import chi2_limit, chi2_p
from .refusal import Refusal

__all__ = ["Part", "Pool", "pool"]

Array = npt.NDArray[np.float64]

INFORMATION_FLOOR = 1e-8
"""Directions with less information, relative to the best, say nothing of any fault and are no checks of the pool."""


@dataclass(frozen=True)
class Part:
    """Snapshots of one linearisation.

    Attributes
    ----------
    count : int
    total : ndarray, shape (r,)
        Sum of their parity vectors.
    signatures : ndarray, shape (r, k)
        Zero for faults that nothing checks here.
    """

    count: int
    total: Array
    signatures: Array


@dataclass(frozen=True)
class Pool:
    """Pooled evidence.

    Attributes
    ----------
    count : int
        Number of snapshots with at least one check.
    parity : ndarray, shape (q,)
        ``N(signatures @ b, I)``: a steady fault of size b in every snapshot.
    signatures : ndarray, shape (q, k)
    objective, limit, p : float
        Square of `parity`, its limit, and its p-value.
    contrast, contrast_checks, contrast_p : float, int, float
        What the parts say against each other and no steady fault accounts for; nan p where there is one part only.
    size, sigma : ndarray, shape (k,)
        Of each fault, if it were the only one and steady; nan where nothing checks it.
    """

    count: int
    parity: Array
    signatures: Array
    objective: float
    limit: float
    p: float
    contrast: float
    contrast_checks: int
    contrast_p: float
    size: Array
    sigma: Array

    @property
    def checks(self) -> int:
        """Independent checks of a steady fault."""
        return self.parity.size


def pool(parts: Sequence[Part], *, level: float = 0.05, floor: float = INFORMATION_FLOOR) -> Pool:
    """Pool the evidence of snapshots.

    Parameters
    ----------
    parts : sequence of Part
        All with the same k faults in the same units.
    level : float
        Of the limit, within (0, 1).
    floor : float
        Singular values of the information below this share of the largest are dropped. Where every snapshot is
        linearised at its own noisy values use some per cent: smaller ones are noise of the linearisation.

    Returns
    -------
    Pool

    Raises
    ------
    Refusal
        Without any check.
    """
    used = [p for p in parts if p.count > 0 and p.total.size > 0]
    if not used:
        raise Refusal("no-check", "no snapshot has a check")
    root = [np.sqrt(p.count) for p in used]
    # Each mean, brought to unit covariance; then the parts one after the other, so that no tall matrix is needed.
    score = np.concatenate([p.total / n for p, n in zip(used, root, strict=True)])
    stacked = np.vstack([p.signatures * n for p, n in zip(used, root, strict=True)])
    norm = np.linalg.norm(stacked, axis=0)
    scaled = stacked / np.where(norm > 0, norm, 1.0)
    if len(used) == 1:
        # One part: its own parity vector, whatever of it a fault can reach.
        parity, signatures, left, spare = score, stacked, 0.0, 0
    else:
        u, s, _ = np.linalg.svd(scaled, full_matrices=False)
        basis = u[:, s > floor * s[0]] if s.size and s[0] > 0 else u[:, :0]
        parity, signatures = basis.T @ score, basis.T @ stacked
        left = max(float(score @ score - parity @ parity), 0.0)
        spare = score.size - parity.size
    objective = float(parity @ parity)
    length = np.linalg.norm(signatures, axis=0)
    known = length > 0
    with np.errstate(divide="ignore", invalid="ignore"):
        size = np.where(known, (signatures.T @ parity) / length**2, np.nan)
        sigma = np.where(known, 1.0 / length, np.nan)
    return Pool(
        count=sum(p.count for p in used),
        parity=parity,
        signatures=signatures,
        objective=objective,
        limit=chi2_limit(level, parity.size),
        p=chi2_p(objective, parity.size),
        contrast=left,
        contrast_checks=spare,
        contrast_p=chi2_p(left, spare),
        size=size,
        sigma=sigma,
    )
