"""The evidence of all snapshots that have a check, in order, ready for the kernels."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..adjust.table import Group
from ..diagnose.pooled import Part, Pool, pool
from ..model import Candidate
from ..snapshot import signatures

if TYPE_CHECKING:
    from ..results import Result

__all__ = ["NOISY_FLOOR", "Evidence", "Sequence"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]

NOISY_FLOOR = 0.05
"""Where every snapshot has its own linearisation: directions with less information than this are noise of it."""


@dataclass(frozen=True)
class Evidence:
    """Snapshots of one linearisation.

    Attributes
    ----------
    group : Group
    rows : ndarray of int, shape (n,)
        Snapshots, counted from 0, rising.
    parity : ndarray, shape (n, r)
    signatures : ndarray, shape (r, k)
        Of every candidate, per unit of it.
    """

    group: Group
    rows: Ints
    parity: Array
    signatures: Array


@dataclass(frozen=True)
class Sequence:
    """All snapshots of a result that have a check.

    Attributes
    ----------
    result : Result
    parts : tuple of Evidence
    """

    result: Result
    parts: tuple[Evidence, ...]

    @classmethod
    def of(cls, result: Result) -> Sequence:
        """Take what a result found; snapshots without a check, or not solved, are left out."""
        parts = tuple(
            Evidence(g, np.asarray(g.rows), g.parity, signatures(result.model, g))
            for g in result.table.groups
            if g.checks > 0 and len(g.rows)
        )
        return cls(result, parts)

    def minus(self, shift: Array, candidate: int) -> Sequence:
        """Return the evidence with a fault granted: its size in every snapshot, shape (N,)."""
        parts = tuple(
            Evidence(p.group, p.rows, p.parity - shift[p.rows][:, None] * p.signatures[:, candidate], p.signatures)
            for p in self.parts
        )
        return Sequence(self.result, parts)

    def without(self, snapshot: int) -> Sequence:
        """Return the evidence without one snapshot."""
        parts = []
        for p in self.parts:
            keep = p.rows != snapshot
            if keep.any():
                parts.append(Evidence(p.group, p.rows[keep], p.parity[keep], p.signatures))
        return Sequence(self.result, tuple(parts))

    @property
    def candidates(self) -> tuple[Candidate, ...]:
        """Every fault that may be named."""
        return self.result.model.candidates

    @cached_property
    def rows(self) -> Ints:
        """Snapshots with a check, rising."""
        return np.sort(np.concatenate([p.rows for p in self.parts])) if self.parts else np.zeros(0, dtype=np.int64)

    @property
    def count(self) -> int:
        """How many snapshots have a check."""
        return self.rows.size

    @cached_property
    def one_linearisation(self) -> bool:
        """Whether snapshots differ at most in which readings are absent, so that few linearisations serve all."""
        return all(p.group.equations.is_linear for p in self.parts) and not self.result.model.has_relative

    @cached_property
    def square(self) -> float:
        """Sum of squares of all parity vectors."""
        return float(sum((p.parity**2).sum() for p in self.parts))

    @cached_property
    def checks(self) -> int:
        """All checks of all snapshots together."""
        return int(sum(p.parity.size for p in self.parts))

    def pool(self, first: int = 0, last: int | None = None) -> Pool:
        """Pool the snapshots from `first` to before `last`, counted from 0."""
        end = self.result.size if last is None else last
        parts = []
        for p in self.parts:
            inside = (p.rows >= first) & (p.rows < end)
            if inside.any():
                parts.append(Part(int(inside.sum()), p.parity[inside].sum(axis=0), p.signatures))
        floor = {} if self.one_linearisation else {"floor": NOISY_FLOOR}
        return pool(parts, level=self.result.settings.level, **floor)

    @cached_property
    def pooled(self) -> Pool:
        """All of them pooled."""
        return self.pool()

    def scores(self, candidate: int) -> tuple[Array, Array]:
        """Score and information of a fault in every snapshot, shapes (N,); zero where nothing checks it."""
        score, information = np.zeros(self.result.size), np.zeros(self.result.size)
        for p in self.parts:
            f = p.signatures[:, candidate]
            score[p.rows] = p.parity @ f
            information[p.rows] = f @ f
        return score, information

    @cached_property
    def cosine(self) -> Array:
        """Correlation of the signatures of all candidates over the pool, shape (k, k); zero where nothing checks one."""
        f = self.pooled.signatures
        norm = np.linalg.norm(f, axis=0)
        unit = np.where(norm > 0, f / np.where(norm > 0, norm, 1.0), 0.0)
        return np.clip(unit.T @ unit, -1.0, 1.0)

    @cached_property
    def checked(self) -> npt.NDArray[np.bool_]:
        """Whether anything checks each candidate, shape (k,)."""
        f = self.pooled.signatures
        natural = np.array([np.linalg.norm(p.signatures, axis=0) for p in self.parts]).max(axis=0)
        norm = np.linalg.norm(f, axis=0)
        return np.asarray((norm > 0) & (norm > 1e-10 * natural))

    @cached_property
    def times(self) -> tuple[datetime, ...] | None:
        """Stamp of each snapshot where all labels are ISO 8601, else None."""
        try:
            stamps = tuple(datetime.fromisoformat(label) for label in self.result.labels)
        except ValueError:
            return None
        zoned = {s.tzinfo is not None for s in stamps}
        return stamps if len(zoned) == 1 else None

    def first_from(self, when: datetime) -> int | None:
        """First snapshot at or after a date, counted from 0; None where the snapshots have no stamps.

        A date without a zone is taken in the zone of the snapshots, and the other way round as UTC.
        """
        if self.times is None:
            return None
        for i, stamp in enumerate(self.times):
            a, b = stamp, when
            if a.tzinfo is not None and b.tzinfo is None:
                b = b.replace(tzinfo=a.tzinfo)
            elif a.tzinfo is None and b.tzinfo is not None:
                b = b.astimezone(UTC).replace(tzinfo=None)
            if a >= b:
                return i
        return len(self.times)
