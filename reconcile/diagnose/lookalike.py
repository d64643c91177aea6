"""Which faults look alike: parallel signatures, and sets of faults whose signatures span the same space.

Two faults with parallel signatures move the evidence along the same line, so no reading of this network can
tell them apart. Likewise two sets of faults with the same column space fit any evidence equally well
(equivalent sets: Bagajewicz & Jiang 1998); what can be reported honestly is the class, never one member.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from .refusal import Refusal

__all__ = ["ANGLE", "PARALLEL", "LookAlikes", "Pairs", "SpanClass", "classes", "near_parallel", "set_classes"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

PARALLEL = 1e-9
"""Signatures with ``|cos| >= 1 - PARALLEL`` count as parallel."""

ANGLE = float(np.sqrt(2 * PARALLEL))
"""The same as an angle in radians, for principal angles between subspaces."""

ZERO = 1e-10
"""Norm, relative to its natural scale, below which a signature counts as zero."""


@dataclass(frozen=True)
class LookAlikes:
    """Candidates grouped by the direction of their signatures.

    Attributes
    ----------
    label : ndarray of int, shape (k,)
        Class of each candidate, counted from 0 in the order of first members; -1 where nothing checks it.
    ratio : ndarray, shape (k,)
        Signed scale against the first member of the class: ``f_i = ratio_i * f_first``; 0 where not checked.
    members : tuple of tuple of int
        Candidates of each class, in ascending order.
    unchecked : tuple of int
        Candidates with a zero signature: nothing would notice them.
    units : ndarray, shape (r, c)
        Unit signature of the first member of each class.
    norms : ndarray, shape (k,)
        Length of each signature: shift of the evidence, in standard deviations, per unit of the fault.
    """

    label: Ints
    ratio: Array
    members: tuple[tuple[int, ...], ...]
    unchecked: tuple[int, ...]
    units: Array
    norms: Array

    @property
    def tied(self) -> tuple[tuple[int, ...], ...]:
        """Classes with more than one member."""
        return tuple(m for m in self.members if len(m) > 1)


@dataclass(frozen=True)
class Pairs:
    """Pairs of candidates that are hard to tell apart, the nearest first.

    Attributes
    ----------
    first, second : ndarray of int, shape (n,)
        Candidates, ``first < second``.
    correlation : ndarray, shape (n,)
        Signed cosine between the two signatures.
    tied : ndarray of bool, shape (n,)
        Whether they are exactly parallel and so cannot be told apart at all.
    """

    first: Ints
    second: Ints
    correlation: Array
    tied: npt.NDArray[np.bool_]


@dataclass(frozen=True)
class SpanClass:
    """Sets of faults with the same column space.

    Attributes
    ----------
    rank : int
        Dimension of the space: how many checks any of these sets uses up.
    sets : tuple of tuple of int
        The sets, in the order given. A set with more than `rank` members says nothing that a smaller one does not.
    """

    rank: int
    sets: tuple[tuple[int, ...], ...]


def _checked(signatures: Array, scale: npt.ArrayLike | None) -> tuple[Array, npt.NDArray[np.bool_]]:
    norms = np.linalg.norm(signatures, axis=0)
    if not np.all(np.isfinite(norms)):
        raise Refusal("signature-not-finite", "a signature has an entry that is not a finite number")
    natural = norms.max(initial=0.0) if scale is None else np.broadcast_to(np.asarray(scale, float), norms.shape)
    return norms, (norms > ZERO * natural) & (norms > 0)


def classes(signatures: Array, *, scale: npt.ArrayLike | None = None, tolerance: float = PARALLEL) -> LookAlikes:
    """Group candidates whose signatures are parallel.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
        One column per candidate.
    scale : array of shape (k,), optional
        Length that each signature would have if it were fully checked, ``1 / sigma`` for a meter; what is shorter
        than 1e-10 of it counts as zero. The longest signature is taken when left out, so give it when the
        candidates have units of very different size.
    tolerance : float
        Signatures with ``|cos| >= 1 - tolerance`` are parallel.

    Returns
    -------
    LookAlikes
    """
    f = np.asarray(signatures, dtype=float)
    r, k = f.shape
    norms, checked = _checked(f, scale)
    unit = f / np.where(checked, norms, 1.0)
    label = np.full(k, -1, dtype=np.int64)
    ratio = np.zeros(k)
    members: list[tuple[int, ...]] = []
    first: list[int] = []
    open_ = np.flatnonzero(checked)
    while open_.size:
        head = int(open_[0])
        cosine = unit[:, head] @ unit[:, open_]
        same = np.abs(cosine) >= 1.0 - tolerance
        same[0] = True
        found = open_[same]
        label[found] = len(members)
        ratio[found] = np.sign(cosine[same]) * norms[found] / norms[head]
        members.append(tuple(int(i) for i in found))
        first.append(head)
        open_ = open_[~same]
    units = unit[:, first] if first else np.zeros((r, 0))
    return LookAlikes(label, ratio, tuple(members), tuple(int(i) for i in np.flatnonzero(~checked)), units, norms)


def near_parallel(signatures: Array, threshold: float = 0.9, *, scale: npt.ArrayLike | None = None) -> Pairs:
    """Pairs of candidates whose signatures are nearly parallel: hard to tell apart with real noise.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
    threshold : float
        Smallest ``|cos|`` to list, within (0, 1].
    scale : array of shape (k,), optional
        See `classes`.

    Returns
    -------
    Pairs
    """
    if not 0 < threshold <= 1:
        raise Refusal("threshold-out-of-range", f"a correlation threshold lies within 0 and 1, not {threshold}")
    f = np.asarray(signatures, dtype=float)
    norms, checked = _checked(f, scale)
    unit = np.where(checked, f / np.where(checked, norms, 1.0), 0.0)
    cosine = np.clip(unit.T @ unit, -1.0, 1.0)
    limit = min(threshold, 1.0 - PARALLEL)
    first, second = np.nonzero(np.triu(np.abs(cosine) >= limit, 1) & np.outer(checked, checked))
    value = cosine[first, second]
    order = np.lexsort((second, first, -np.round(np.abs(value), 12)))
    return Pairs(
        first[order].astype(np.int64),
        second[order].astype(np.int64),
        value[order],
        np.abs(value[order]) >= 1.0 - PARALLEL,
    )


def basis(columns: Array, angle: float = ANGLE) -> Array:
    """Orthonormal basis of the space of the columns, each weighted alike; columns nearly in the rest are dropped."""
    norms = np.linalg.norm(columns, axis=0)
    unit = columns[:, norms > 0] / norms[norms > 0]
    if unit.shape[1] == 0:
        return np.zeros((columns.shape[0], 0))
    u, s, _ = np.linalg.svd(unit, full_matrices=False)
    return np.asarray(u[:, s > angle])


def same_space(one: Array, other: Array, angle: float = ANGLE) -> bool:
    """Whether two orthonormal bases span the same space: the largest principal angle is below `angle`."""
    if one.shape[1] != other.shape[1]:
        return False
    if one.shape[1] == 0:
        return True
    return bool(np.linalg.norm(one - other @ (other.T @ one), 2) <= angle)


def set_classes(signatures: Array, sets: Sequence[Sequence[int]]) -> tuple[SpanClass, ...]:
    """Group sets of faults that span the same space and so fit any evidence equally well.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
    sets : sequence of sequences of int
        Candidates of each set.

    Returns
    -------
    tuple of SpanClass
        In the order of their first sets.
    """
    f = np.asarray(signatures, dtype=float)
    bases: list[Array] = []
    found: list[list[tuple[int, ...]]] = []
    for one in sets:
        space = basis(f[:, list(one)])
        for known, where in zip(bases, found, strict=True):
            if same_space(known, space):
                where.append(tuple(one))
                break
        else:
            bases.append(space)
            found.append([tuple(one)])
    return tuple(SpanClass(b.shape[1], tuple(s)) for b, s in zip(bases, found, strict=True))
