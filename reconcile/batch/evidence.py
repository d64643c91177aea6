"""Evidence of every snapshot in words, and which meters are suspected most often."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from scipy.special import chdtrc

from .. import export
from ..diagnose.critical import sidak_limit
from ..diagnose.tests_of_readings import signature_tests
from .lines import column_lines, header_line
from .totals import Told, Totals, parts_of
from .work import Engine

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["MOST_FACTORS", "Evidence", "Flagged"]

EXACT_LIMITS = 8
"""Patterns of absent readings, the most frequent ones, for which the limit of the largest test value is exact."""

MOST_FACTORS = 500
"""Patterns, the most frequent ones, whose covariance is written."""

NOT_EXPLAINED = "one of many: see flagged.csv"


@dataclass(frozen=True)
class Flagged:
    """A meter with the largest test value of suspicious snapshots."""

    meter: str
    snapshots: int
    first: str
    last: str
    largest_z: float
    largest_at: str
    longest_run: int
    run_first: str
    run_last: str


@dataclass
class Evidence:
    """Writes the table of evidence from the parts.

    Attributes
    ----------
    engine : Engine
    totals : Totals
    parts : Path
        Folder of the parts.
    count : int
        Number of parts.
    level : float
    words : Counter
        Snapshots by their word; filled by `write`.
    flagged : list of Flagged
        Filled by `write`.
    exact : dict of pattern to limit
    """

    engine: Engine
    totals: Totals
    parts: Path
    count: int
    level: float
    words: Counter[str] = field(default_factory=Counter)
    flagged: list[Flagged] = field(default_factory=list)
    exact: dict[bytes, float] = field(default_factory=dict)

    def exact_limits(self, ranked: Sequence[tuple[bytes, list[int]]]) -> None:
        """Work out the limit of the largest test value where it decides a word, for the most frequent patterns."""
        if self.engine.batch is None:
            return
        doubtful = [code for code, (_, _, doubts) in ranked if doubts][:EXACT_LIMITS]
        for code in doubtful:
            f = self.engine.batch.signatures(self.absent(code))
            norms = np.linalg.norm(f, axis=0)
            if f.shape[0] and np.any(norms > 0):
                limit = signature_tests(np.zeros(f.shape[0]), f, self.level, scale=norms).limit
                self.exact[code] = limit

    def absent(self, code: bytes) -> npt.NDArray[np.bool_]:
        """Unpack a pattern: which readings are absent."""
        bits = np.unpackbits(np.frombuffer(code, dtype=np.uint8))
        return bits[: len(self.engine.model.readings)].astype(bool)

    def write(
        self, path: Path, chosen: Sequence[Told], frame: pd.DataFrame | None, number: dict[bytes, int]
    ) -> npt.NDArray[np.int64]:
        """Write the table of evidence; return the pattern of every snapshot, as numbered in the covariance file."""
        told = {t.row: i for i, t in enumerate(chosen)}
        group_of = np.full(self.totals.size, -1, dtype=np.int64)
        runs = _Runs()
        start = 0
        with path.open("wb") as file:
            file.write(header_line(export.EVIDENCE_COLUMNS))
            for part in parts_of(self.parts, self.count):
                columns = self._evidence_of(part, start, told, frame)
                self.words.update(columns["word"].tolist())
                column_lines(columns, file)
                size = part["objective"].size
                if "absent" in part:
                    local = np.array([number[c.tobytes()] for c in part["absent"]], dtype=np.int64)
                    group_of[start : start + size] = np.where(local < MOST_FACTORS, local, -2)[part["pattern"]]
                else:
                    group_of[start : start + size] = -2
                runs.add(part, start)
                start += size
        tags = {int(i): self.engine.model.readings[i].tag for i in self.engine.model.meters}
        self.flagged = runs.flagged(tags)
        return group_of

    def _evidence_of(
        self, part: dict[str, Any], start: int, told: dict[int, int], frame: pd.DataFrame | None
    ) -> dict[str, npt.NDArray[Any]]:
        objective, checks = part["objective"], part["checks"]
        size = objective.size
        with np.errstate(invalid="ignore"):
            p = np.where(checks > 0, chdtrc(np.maximum(checks, 1), objective), np.nan)
        words = np.where(p >= 0.05, "agrees", np.where(p >= 0.001, "watch", "does not agree")).astype(object)
        words[~np.isfinite(p)] = "cannot tell"
        watch = words == "watch"
        if watch.any():
            words[watch & (np.abs(np.nan_to_num(part["largest"])) > self._limits(part))] = "does not agree"
        suspicious = part["suspicious"]
        explanation = np.full(size, "", dtype=object)
        probability = np.full(size, np.nan)
        decision = np.where(suspicious, "flagged", "").astype(object)
        reason = np.where(checks > 0, "", "no check possible").astype(object)
        reason[suspicious] = NOT_EXPLAINED
        for i, text in part["texts"]["failed"].items():
            words[int(i)], reason[int(i)] = "not solved", text
        for i in part["told"].tolist():
            n = told.get(start + i)
            if n is not None and frame is not None:
                row = frame.iloc[n]
                words[i], explanation[i], probability[i] = row["word"], row["explanation"], row["probability"]
                decision[i], reason[i] = row["decision"], row["reason"]
        return {
            "snapshot": part["labels"],
            "objective": objective,
            "checks": checks,
            "limit": part["limit"],
            "p_value": p,
            "word": words.astype(np.str_),
            "explanation": explanation.astype(np.str_),
            "probability": probability,
            "decision": decision.astype(np.str_),
            "reason": reason.astype(np.str_),
        }

    def _limits(self, part: dict[str, Any]) -> npt.NDArray[np.float64]:
        """Limit of the largest test value of each snapshot; that for independent tests where the exact one is not known."""
        tests = part["tests"]
        known = {int(k): sidak_limit(self.level, int(k)) if k else np.inf for k in np.unique(tests)}
        limits = np.array([known[int(k)] for k in tests])
        if "absent" in part:
            exact = np.array([self.exact.get(c.tobytes(), np.nan) for c in part["absent"]])[part["pattern"]]
            limits = np.where(np.isfinite(exact), exact, limits)
        return limits

    def frame(self) -> pd.DataFrame:
        """Table of the meters suspected most often."""
        import pandas as pd

        columns = list(Flagged.__dataclass_fields__)
        return pd.DataFrame([[getattr(f, c) for c in columns] for f in self.flagged], columns=columns)


class _Runs:
    """Snapshots beyond their limit by the meter with the largest test value, and unbroken runs of them."""

    def __init__(self) -> None:
        self.found: dict[int, dict[str, Any]] = {}
        self.open: tuple[int, int, str, int, str] | None = None  # meter, length, first label, last row, last label

    def add(self, part: dict[str, Any], start: int) -> None:
        where = np.flatnonzero(part["suspicious"] & (part["suspect"] >= 0))
        if not where.size:
            return
        meters, labels, z = part["suspect"][where], part["labels"], part["largest"]
        for m in np.unique(meters).tolist():
            own = where[meters == m]
            strongest = int(own[np.argmax(np.abs(z[own]))])
            known = self.found.setdefault(
                m, {"n": 0, "first": str(labels[own[0]]), "z": 0.0, "at": "", "run": (0, "", "")}
            )
            known["n"] += own.size
            known["last"] = str(labels[own[-1]])
            if abs(z[strongest]) > abs(known["z"]):
                known["z"], known["at"] = float(z[strongest]), str(labels[strongest])
        breaks = np.flatnonzero((np.diff(where) > 1) | (np.diff(meters) != 0)) + 1
        for run in np.split(np.arange(where.size), breaks):
            a, b = int(where[run[0]]), int(where[run[-1]])
            self._run(int(meters[run[0]]), start + a, str(labels[a]), start + b, str(labels[b]))

    def _run(self, meter: int, first: int, first_label: str, last: int, last_label: str) -> None:
        length = last - first + 1
        if self.open is not None and self.open[0] == meter and self.open[3] == first - 1:
            length, first_label = length + self.open[1], self.open[2]
        self.open = (meter, length, first_label, last, last_label)
        if length > self.found[meter]["run"][0]:
            self.found[meter]["run"] = (length, first_label, last_label)

    def flagged(self, tags: dict[int, str]) -> list[Flagged]:
        out = [
            Flagged(tags[m], f["n"], f["first"], f["last"], f["z"], f["at"], *f["run"]) for m, f in self.found.items()
        ]
        return sorted(out, key=lambda f: (-f.snapshots, f.meter))
