"""Sets of faults, the spaces their signatures span, and how well they fit.

Sets are made of classes of parallel candidates, not of candidates: a tie costs nothing. Classes are numbered as in
`LookAlikes`; a *class set* is a tuple of distinct classes in ascending order.
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from math import comb

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp
from scipy.sparse.csgraph import connected_components
from scipy.spatial import cKDTree

from .lookalike import ANGLE, PARALLEL, LookAlikes, basis, same_space

__all__ = ["Spans", "choose_all", "count_sets", "expand", "make_spans", "raw_sets"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]
Set = tuple[int, ...]

CHUNK = 50_000
PROBES = 8


def count_sets(candidates: int, most: int) -> int:
    """How many sets of 1 to `most` of the candidates there are."""
    return sum(comb(candidates, s) for s in range(1, min(most, candidates) + 1))


def choose_all(items: Sequence[int], most: int) -> Iterator[Set]:
    """All sets of 1 to `most` items, small ones first."""
    for s in range(1, min(most, len(items)) + 1):
        yield from itertools.combinations(items, s)


def raw_sets(alike: LookAlikes, most: int) -> Iterator[tuple[Set, Set]]:
    """All sets of 1 to `most` checked candidates, each with its class set."""
    label = alike.label.tolist()
    checked = [i for i, c in enumerate(label) if c >= 0]
    for raw in choose_all(checked, most):
        yield raw, tuple(sorted({label[i] for i in raw}))


def expand(class_set: Set, alike: LookAlikes, most: int) -> Iterator[Set]:
    """All sets of at most `most` candidates that touch exactly these classes."""
    spare = most - len(class_set)
    choices = [list(choose_all(alike.members[c], spare + 1)) for c in class_set]
    for parts in itertools.product(*choices):
        if sum(map(len, parts)) <= most:
            yield tuple(sorted(i for part in parts for i in part))


@dataclass(frozen=True)
class Spans:
    """Distinct spaces spanned by a list of class sets.

    Attributes
    ----------
    number : dict
        Space of each class set, dependent ones included.
    sets : tuple of tuple of class sets
        The independent class sets of each space.
    blocks : tuple of (ids, rows, inverse)
        Per number of faults s: numbers of its spaces, shape (n,); one class set of each, shape (n, s); the inverse
        of the Gram matrix of its unit signatures, shape (n, s, s).
    """

    number: dict[Set, int]
    sets: tuple[tuple[Set, ...], ...]
    blocks: tuple[tuple[Ints, Ints, Array], ...]

    def fit(self, parity: Array, units: Array) -> tuple[Array, list[Array]]:
        """Least squares of the parity vector on each space.

        Parameters
        ----------
        parity : ndarray, shape (r,)
        units : ndarray, shape (r, c)
            Unit signatures of the classes.

        Returns
        -------
        leftover : ndarray, shape (number of spaces,)
            Squared length of what the space does not reach.
        sizes : list of ndarray, one per block, shape (n, s)
            In units of the unit signatures.
        """
        h = units.T @ parity
        total = float(parity @ parity)
        leftover = np.full(len(self.sets), total)
        sizes = []
        for ids, rows, inverse in self.blocks:
            theta = np.einsum("nij,nj->ni", inverse, h[rows])
            leftover[ids] = np.maximum(total - np.einsum("ni,ni->n", theta, h[rows]), 0.0)
            # The difference above cancels for a close fit to strong evidence: form the residual there.
            close = np.flatnonzero(leftover[ids] < 1e-4 * total)
            for lo in range(0, close.size, 2000):
                n = close[lo : lo + 2000]
                residual = parity[:, None] - np.einsum("rns,ns->rn", units[:, rows[n]], theta[n])
                again = np.einsum("rns,rn->ns", units[:, rows[n]], residual)
                change = np.einsum("nij,nj->ni", inverse[n], again)
                residual -= np.einsum("rns,ns->rn", units[:, rows[n]], change)
                theta[n] += change
                leftover[ids[n]] = np.einsum("rn,rn->n", residual, residual)
            sizes.append(theta)
        return leftover, sizes


def make_spans(class_sets: Iterable[Set], units: Array) -> Spans:
    """Group class sets by the space they span.

    Parameters
    ----------
    class_sets : iterable of tuple of int
        A dependent one brings the independent subset that spans its space with it.
    units : ndarray, shape (r, c)
        Unit signatures of the classes.

    Returns
    -------
    Spans
    """
    gram = units.T @ units
    by_size: dict[int, list[Set]] = {}
    for one in dict.fromkeys(class_sets):
        by_size.setdefault(len(one), []).append(one)
    independent: dict[int, list[Set]] = {}
    dependent: dict[Set, Set] = {}
    for s, these in sorted(by_size.items(), reverse=True):
        rows = np.array(these, dtype=np.int64)
        free = _independent(gram, rows)
        independent.setdefault(s, []).extend(these[i] for i in np.flatnonzero(free))
        for i in np.flatnonzero(~free):
            small = _spanning(these[i], gram)
            dependent[these[i]] = small
            independent.setdefault(len(small), []).append(small)
    number: dict[Set, int] = {}
    sets: list[list[Set]] = []
    blocks: list[tuple[Ints, Ints, Array]] = []
    for s in sorted(independent):
        these = list(dict.fromkeys(independent[s]))
        if not these:
            continue
        rows = np.array(these, dtype=np.int64)
        inverse = np.asarray(np.linalg.inv(gram[rows[:, :, None], rows[:, None, :]]), dtype=np.float64)
        start = len(sets)
        heads = []
        for members in _groups(rows, inverse, units):
            for m in members:
                number[these[m]] = len(sets)
            sets.append([these[m] for m in members])
            heads.append(members[0])
        blocks.append((np.arange(start, len(sets), dtype=np.int64), rows[heads], inverse[heads]))
    number.update({one: number[small] for one, small in dependent.items()})
    return Spans(number, tuple(tuple(s) for s in sets), tuple(blocks))


def _independent(gram: Array, rows: Ints) -> npt.NDArray[np.bool_]:
    out = np.empty(rows.shape[0], dtype=bool)
    for lo in range(0, rows.shape[0], CHUNK):
        r = rows[lo : lo + CHUNK]
        out[lo : lo + CHUNK] = np.linalg.eigvalsh(gram[r[:, :, None], r[:, None, :]])[:, 0] > PARALLEL
    return out


def _spanning(one: Set, gram: Array) -> Set:
    """Independent subset with the same span: elimination in the order given, so that it is reproducible."""
    kept: list[int] = []
    for c in one:
        trial = [*kept, c]
        if np.linalg.eigvalsh(gram[np.ix_(trial, trial)])[0] > PARALLEL:
            kept.append(c)
    return tuple(kept)


def _groups(rows: Ints, inverse: Array, units: Array) -> list[list[int]]:
    """Rows that span the same space: found by how they project some fixed vectors, and then verified."""
    n, s = rows.shape
    if s == 1 or n == 1:
        return [[i] for i in range(n)]
    if s == units.shape[0]:
        return [list(range(n))]
    groups: list[list[int]] = []
    for run in _near(_keys(rows, inverse, units)):
        if run.size == 1:
            groups.append([int(run[0])])
            continue
        local: list[tuple[Array, list[int]]] = []
        for i in run:
            mine = basis(units[:, rows[i]])
            for space, members in local:
                if same_space(space, mine):
                    members.append(int(i))
                    break
            else:
                local.append((mine, [int(i)]))
        groups.extend(members for _, members in local)
    return sorted(groups, key=lambda g: g[0])


def _keys(rows: Ints, inverse: Array, units: Array) -> Array:
    """Squared lengths of the projections of fixed unit vectors: spaces at an angle t differ by at most sin t."""
    probe = np.random.default_rng(20240229).normal(size=(PROBES, units.shape[0]))
    h = (probe / np.linalg.norm(probe, axis=1, keepdims=True)) @ units
    out = np.empty((rows.shape[0], PROBES))
    for lo in range(0, rows.shape[0], CHUNK):
        part = h[:, rows[lo : lo + CHUNK]]
        out[lo : lo + CHUNK] = np.einsum("qni,nij,qnj->nq", part, inverse[lo : lo + CHUNK], part)
    return out


def _near(key: Array) -> list[Ints]:
    """Runs of rows whose keys may belong to the same space, each in ascending order."""
    bucket, where = np.unique(np.round(key, 8), axis=0, return_inverse=True)
    reach = np.sqrt(PROBES) * ANGLE + 1e-7
    pairs = cKDTree(bucket).query_pairs(reach, output_type="ndarray")
    link = sp.coo_array((np.ones(len(pairs)), (pairs[:, 0], pairs[:, 1])), shape=(len(bucket),) * 2)
    _, run = connected_components(link, directed=False)
    label = run[where.ravel()]
    order = np.argsort(label, kind="stable")
    return np.split(order, np.flatnonzero(np.diff(label[order])) + 1)
