"""One chunk: read, adjusted, written as a part."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Callable, Mapping, Sequence
from contextlib import suppress
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc

from ..adjust.batch import Batch, BatchResult, is_linear
from ..adjust.batch_rows import RowBatch
from ..adjust.solve import Problem
from ..adjust.table import adjust_table
from ..diagnose.critical import chi2_limit
from ..errors import SolveError
from ..model import Model
from ..readings.table import ReadingsTable, Status
from ..readings.validity import SignalLimits, check_signals
from .lines import number_lines, pattern_lines
from .pieces import Piece
from .rows import Rows, rows_of

if TYPE_CHECKING:
    from ..run import Case

__all__ = ["DETAILED", "Engine", "Worker", "fingerprint", "of_each_meter"]

Array = npt.NDArray[np.float64]

DETAILED = 200
"""Snapshots that are explained one by one; of more suspicious ones the strongest of each meter are."""


def of_each_meter(meters: int) -> int:
    """How many of the snapshots in which a meter has the largest test value are explained."""
    return max(1, DETAILED // max(meters, 1))


def fingerprint(path: Path) -> tuple[int, str]:
    """Size and SHA-256 of a file, read in blocks."""
    digest, size = hashlib.sha256(), 0
    with path.open("rb") as file:
        while block := file.read(1 << 20):
            digest.update(block)
            size += len(block)
    return size, digest.hexdigest()


class Engine:
    """Adjusts any number of snapshots: in blocks where the case is linear, else one by one.

    Parameters
    ----------
    case : Case
    settings : Settings
    excluded : mapping of tag to reason
    typical : ndarray, shape (number of meters,)
        Typical readings; nan where there is none.
    """

    def __init__(self, case: Case, settings: Any, excluded: Mapping[str, str], typical: Array) -> None:
        self.model: Model = case.model
        self.problem: Problem = case.problem(settings)
        self.case = case
        self.out = [i for i, r in enumerate(self.model.readings) if r.tag in excluded]
        self.batch: Batch | None = None
        self.rows: RowBatch | None = None
        given = np.ones(len(self.model.readings), dtype=bool)
        given[self.out] = False
        names = {"names": case.name_of_column, "row_names": case.name_of_row}
        shown, meters = self.model.shown, self.model.meters
        if is_linear(self.problem):
            self.batch = Batch(self.problem, given, shown, meters, **names)
        elif self._linear_but_for_sigmas():
            with suppress(SolveError):  # a sigma that vanishes at typical values: one by one, then
                self.rows = RowBatch(self.problem, given, self._nominal(typical), shown, meters, **names)

    def _linear_but_for_sigmas(self) -> bool:
        shared = any(any(cause.relative) for cause in self.model.shared)
        return not shared and self.problem.equations(np.zeros(len(self.model.readings))).is_linear

    def _nominal(self, typical: Array) -> Array:
        model = self.model
        out = model.constants.copy()
        out[model.meters] = typical * model.factor[model.meters] + model.offset[model.meters]
        start = self.problem.start[model.columns]
        out = np.where(np.isfinite(out), out, start)
        return np.where(np.isfinite(out), out, np.nanmedian(np.abs(out)) if np.isfinite(out).any() else 1.0)

    def adjust(self, readings: Array) -> tuple[BatchResult, dict[int, str]]:
        """Adjust readings of the meters, shape (number of meters, N); and which snapshots failed, and why."""
        model = self.model
        base = np.repeat(model.constants[:, None], readings.shape[1], axis=1)
        base[model.meters] = readings * model.factor[model.meters, None] + model.offset[model.meters, None]
        base[self.out] = np.nan
        if self.batch is not None:
            return self.batch.adjust(base), {}
        if self.rows is None:
            return self._one_by_one(base)
        result, left = self.rows.adjust(base)
        if not left.any():
            return result, {}
        rest, failed = self._one_by_one(base[:, left])
        result.values[:, left], result.sigmas[left] = rest.values, rest.sigmas
        for name in ("objective", "checks", "suspect", "largest", "absent", "checked"):
            getattr(result, name)[left] = getattr(rest, name)
        where = np.flatnonzero(left)
        return result, {int(where[i]): words for i, words in failed.items()}

    def _one_by_one(self, base: Array) -> tuple[BatchResult, dict[int, str]]:
        model, count = self.model, base.shape[1]
        shown, meters = model.shown, model.meters
        values, sigmas = np.full((shown.size, count), np.nan), np.full((count, shown.size), np.nan)
        objective, largest = np.full(count, np.nan), np.full(count, np.nan)
        checks, suspect = np.zeros(count, dtype=np.int64), np.full(count, -1, dtype=np.int64)
        absent = np.ones((count, len(model.readings)), dtype=bool)
        checked = np.zeros_like(absent)
        table = adjust_table(
            self.problem, np.ascontiguousarray(base.T), names=self.case.name_of_column, row_names=self.case.name_of_row
        )
        for g in table.groups:
            rows = g.rows
            values[:, rows] = np.where(g.determined[shown], g.x[:, shown], np.nan).T
            sigmas[rows] = np.linalg.norm(g.cover[shown], axis=1)
            objective[rows], checks[rows] = (g.parity**2).sum(axis=1), g.checks
            checked[rows] = g.checked
            gone = np.zeros(len(model.readings), dtype=bool)
            gone[g.absent] = True
            absent[rows] = gone
            f = g.signatures[:, meters]
            length = np.linalg.norm(f, axis=0)
            if np.any(length > 0):
                z = g.parity @ (f / np.where(length > 0, length, np.inf))
                size = np.abs(z)
                first = np.argmax(size >= size.max(axis=1, keepdims=True) * (1 - 1e-9), axis=1)
                suspect[rows], largest[rows] = meters[first], z[np.arange(rows.size), first]
        failed = {i: str(error) for i, error in table.failed.items()}
        pattern = np.arange(count)
        return (
            BatchResult(values, objective, checks, suspect, largest, None, pattern, absent, checked, sigmas),
            failed,
        )


@dataclass
class Worker:
    """Turns a chunk into a part.

    Attributes
    ----------
    engine : Engine
    tags, headers : tuple of str
        Of the meters, and of their columns.
    signals : mapping of tag to SignalLimits
        What single readings cannot be, judged row by row.
    level : float
    limits : mapping of shown position to (low, high)
        Bounds of variables.
    folder : Path
    formats : tuple of str
    chunk : int
    """

    engine: Engine
    tags: tuple[str, ...]
    headers: tuple[str, ...]
    signals: Mapping[str, SignalLimits]
    level: float
    limits: Mapping[int, tuple[float, float]]
    folder: Path
    formats: tuple[str, ...]
    chunk: int

    def __call__(self, number: int, pieces: Sequence[Piece]) -> dict[str, Any]:
        """Read, adjust and write one chunk; return the journal's line about it.

        Raises
        ------
        InputError
            With every mistake in the chunk.
        OSError
            If a part cannot be written.
        """
        first = number * self.chunk
        rows = self._judged(rows_of(pieces, self.headers, first))
        result, failed = self.engine.adjust(rows.values)
        files = {}
        for kind, write in (
            ("adjusted.csv", lambda p: number_lines(rows.labels, result.values, p)),
            ("sigmas.csv", lambda p: self._sigmas(rows, result, p)),
            ("npz", lambda p: self._numbers(p, first, rows, result, failed)),
        ):
            files[kind] = _written(self.folder / f"{number:06d}.{kind}", write)
        return {"part": number, "rows": rows.values.shape[1], "files": files}

    def _sigmas(self, rows: Rows, result: BatchResult, path: Path) -> None:
        if self.engine.batch is None:
            number_lines(rows.labels, result.sigmas.T, path)
        else:
            pattern_lines(rows.labels, result.sigmas, result.pattern, path)

    def _judged(self, rows: Rows) -> Rows:
        """Leave out what single readings cannot be."""
        if not self.signals:
            return rows
        there = np.isfinite(rows.values.T)
        status = np.where(there, int(Status.GOOD), int(Status.MISSING)).astype(np.int8)
        table = check_signals(ReadingsTable(self.tags, rows.values.T, status), self.signals)
        reasons, counts = dict(rows.reasons), rows.counts.copy()
        for i, j in zip(*np.nonzero(there & ~table.usable), strict=True):
            reasons[int(i), int(j)] = table.reason(int(i), int(j))
            counts[self.tags[j], reasons[int(i), int(j)]] += 1
        values = np.ascontiguousarray(np.where(table.usable, table.values, np.nan).T)
        return replace(rows, values=values, reasons=reasons, counts=counts)

    def _numbers(self, path: Path, first: int, rows: Rows, r: BatchResult, failed: dict[int, str]) -> None:
        known = {int(c): chi2_limit(self.level, int(c)) for c in np.unique(r.checks)}
        limit = np.array([known[int(c)] for c in r.checks])
        with np.errstate(invalid="ignore"):
            suspicious = r.objective > limit
        told = self._told(first, r, suspicious)
        texts = {
            "failed": {str(i): words for i, words in failed.items()},
            "counts": [[tag, words, n] for (tag, words), n in sorted(rows.counts.items())],
            "bounds": self._beyond(r),
            "reasons": [[i, j, w] for (i, j), w in sorted(rows.reasons.items()) if i in set(told.tolist())],
        }
        arrays: dict[str, Any] = {
            "labels": rows.labels,
            "objective": r.objective,
            "checks": r.checks,
            "limit": limit,
            "suspicious": suspicious,
            "suspect": r.suspect,
            "largest": r.largest,
            "told": told,
            "tests": r.checked[:, self.engine.model.meters].sum(axis=1)[r.pattern],
            "doubtful": _to_watch(r),
            "readings": rows.values[:, told].T,
            "texts": np.frombuffer(json.dumps(texts, ensure_ascii=False).encode(), dtype=np.uint8),
        }
        if self.engine.batch is not None:
            arrays.update(pattern=r.pattern, absent=np.packbits(r.absent, axis=1))
        if rows.stamps is not None:
            arrays["stamps"] = rows.stamps
        if "parquet" in self.formats:
            arrays.update(values=r.values.T, sigmas=r.sigmas)
            arrays.setdefault("pattern", r.pattern)
        with path.open("wb") as file:
            np.savez(file, **arrays)

    def _told(self, first: int, r: BatchResult, suspicious: npt.NDArray[np.bool_]) -> npt.NDArray[np.int64]:
        """Rows whose readings are kept, so that any choice of snapshots to explain can be made from the parts."""
        count = suspicious.size
        chosen = set(range(max(0, min(count, DETAILED - first))))
        where = np.flatnonzero(suspicious)
        if where.size <= DETAILED:
            chosen.update(where.tolist())
        for meter in np.unique(r.suspect[where]).tolist():
            own = where[r.suspect[where] == meter]
            chosen.update(own[np.argsort(-r.objective[own], kind="stable")][: of_each_meter(len(self.tags))].tolist())
        return np.array(sorted(chosen), dtype=np.int64)

    def _beyond(self, r: BatchResult) -> list[list[Any]]:
        out: list[list[Any]] = []
        for v, (low, high) in self.limits.items():
            x = r.values[v]
            slack = 1e-9 * (1.0 + np.nan_to_num(r.sigmas[:, v])[r.pattern])
            with np.errstate(invalid="ignore"):
                for word, beyond in (("below", x[x < low - slack]), ("above", x[x > high + slack])):
                    if beyond.size:
                        worst = beyond.min() if word == "below" else beyond.max()
                        out.append([v, word, int(beyond.size), float(worst)])
        return out


def _to_watch(r: BatchResult) -> npt.NDArray[np.bool_]:
    """Snapshots whose word depends on the largest test value: a p-value between 0.001 and 0.05."""
    with np.errstate(invalid="ignore"):
        p = np.where(r.checks > 0, chdtrc(np.maximum(r.checks, 1), r.objective), np.nan)
        return np.asarray((p < 0.05) & (p >= 0.001))


def _written(path: Path, write: Callable[[Path], None]) -> list[Any]:
    """Write a file under another name first; nothing half-written is ever found under its own."""
    unfinished = path.with_name(path.name + ".unfinished")
    try:
        write(unfinished)
        size, digest = fingerprint(unfinished)
        os.replace(unfinished, path)
    except BaseException:
        unfinished.unlink(missing_ok=True)
        raise
    return [path.name, size, digest]
