"""From parts to the data set: evidence in words, explanations of the snapshots worth it, files under their names."""

from __future__ import annotations

import json
import os
import shutil
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
from ..errors import InputError, Location, Notice, Problem
from ..readings.table import ReadingsTable, Status
from .lines import column_lines, header_line
from .pieces import Log
from .totals import Told, Totals, parts_of
from .work import DETAILED, Engine, fingerprint

if TYPE_CHECKING:
    import pandas as pd

    from ..results import Result
    from ..run import Case

__all__ = ["Finish", "Flagged"]

EXACT_LIMITS = 8
"""Patterns of absent readings, the most frequent ones, for which the limit of the largest test value is exact."""

MOST_FACTORS = 500
"""Patterns, the most frequent ones, whose covariance is written."""

ROW_GROUP = 1 << 16
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
class Finish:
    """Puts parts together.

    Attributes
    ----------
    case : Case
    engine : Engine
    log : Log
    totals : Totals
    parts : Path
        Folder of the parts.
    count : int
        Number of parts.
    settings : Settings
    exclude : dict
    formats : tuple of str
    provenance : dict
    """

    case: Case
    engine: Engine
    log: Log
    totals: Totals
    parts: Path
    count: int
    settings: Any
    exclude: dict[str, str]
    formats: tuple[str, ...]
    provenance: dict[str, Any]
    flagged: list[Flagged] = field(default_factory=list)
    words: Counter[str] = field(default_factory=Counter)
    _exact: dict[bytes, float] = field(default_factory=dict)

    def write(self, folder: Path) -> tuple[list[str], dict[str, Any]]:
        """Write all files into a folder.

        Returns
        -------
        names : list of str
            In the order of their description.
        summary : dict
        """
        chosen = self.totals.explained(len(self.engine.model.meters))
        result = self._result(chosen)
        ranked = sorted(self.totals.patterns.items(), key=lambda item: (-item[1][0], item[1][1]))
        number = {code: i for i, (code, _) in enumerate(ranked)}
        self._exact_limits(ranked)
        resources: dict[str, list[dict[str, Any]]] = {}
        variables = [self.engine.model.names[c] for c in self.engine.model.shown]
        for stem in ("adjusted", "sigmas"):
            path = folder / f"{stem}.csv"
            self._join(path, ["snapshot", *variables], stem)
            resources[stem] = [self._resource(stem, path, self._value_fields())]
        group_of = self._evidence(folder / "evidence.csv", chosen, result, number)
        evidence_fields = [(c, _EVIDENCE.get(c, "string"), None) for c in export.EVIDENCE_COLUMNS]
        resources["evidence"] = [self._resource("evidence", folder / "evidence.csv", evidence_fields)]
        small = {k: v for k, v in export.tables(result).items() if k not in resources}
        small["flagged"] = self._flagged_frame()
        for stem, frame in small.items():
            export.WRITERS["csv"](frame, folder / f"{stem}.csv")
            resources[stem] = [self._resource(stem, folder / f"{stem}.csv", _fields_of(frame))]
        if "parquet" in self.formats:
            self._parquet(folder, variables, small, resources)
        self._covariance(folder / "covariance.npz", variables, ranked, group_of)
        summary = self._summary(result, chosen, len(ranked))
        (folder / "summary.json").write_text(json.dumps(summary, indent=2, ensure_ascii=False) + "\n", "utf-8")
        listed = [r for stem in resources for r in resources[stem]]
        for name in ("covariance.npz", "summary.json"):
            listed.append({"name": Path(name).stem, "path": name, **_print_of(folder / name)})
        package = export.description(result.title, listed, self.provenance)
        (folder / "datapackage.json").write_text(json.dumps(package, indent=2, ensure_ascii=False) + "\n", "utf-8")
        return [r["path"] for r in listed] + ["datapackage.json"], summary

    # ------------------------------------------------------------------ the snapshots worth explaining

    def _result(self, chosen: Sequence[Told]) -> Result:
        """The way through memory, for these snapshots alone."""
        tags = self.case.tags
        values = np.array([t.readings for t in chosen]).reshape(len(chosen), len(tags))
        good = np.isfinite(values)
        table = ReadingsTable(
            tags,
            values,
            np.where(good, int(Status.GOOD), int(Status.MISSING)).astype(np.int8),
            labels=[t.label for t in chosen],
            reasons={(i, j): words for i, t in enumerate(chosen) for j, words in t.reasons.items()},
            sources=tuple(layout.name for layout in self.log.layouts),
            source_hash=self.log.source_hash,
        )
        from dataclasses import asdict, replace

        result = self.case.run(table, exclude=self.exclude, **asdict(self.settings))
        return replace(result, provenance=self.provenance)

    # ------------------------------------------------------------------ evidence

    def _exact_limits(self, ranked: Sequence[tuple[bytes, list[int]]]) -> None:
        if self.engine.batch is None:
            return
        doubtful = [code for code, (_, _, doubts) in ranked if doubts][:EXACT_LIMITS]
        for code in doubtful:
            f = self.engine.batch.signatures(self._absent(code))
            norms = np.linalg.norm(f, axis=0)
            if f.shape[0] and np.any(norms > 0):
                limit = signature_tests(np.zeros(f.shape[0]), f, self.settings.level, scale=norms).limit
                self._exact[code] = limit

    def _absent(self, code: bytes) -> npt.NDArray[np.bool_]:
        bits = np.unpackbits(np.frombuffer(code, dtype=np.uint8))
        return bits[: len(self.engine.model.readings)].astype(bool)

    def _evidence(
        self, path: Path, chosen: Sequence[Told], result: Result, number: dict[bytes, int]
    ) -> npt.NDArray[np.int64]:
        """Write the table of evidence; return the pattern of every snapshot, as numbered in the covariance file."""
        told = {t.row: i for i, t in enumerate(chosen)}
        frame = export.tables(result)["evidence"] if chosen else None
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
        known = {int(k): sidak_limit(self.settings.level, int(k)) if k else np.inf for k in np.unique(tests)}
        limits = np.array([known[int(k)] for k in tests])
        if "absent" in part:
            exact = np.array([self._exact.get(c.tobytes(), np.nan) for c in part["absent"]])[part["pattern"]]
            limits = np.where(np.isfinite(exact), exact, limits)
        return limits

    def _flagged_frame(self) -> pd.DataFrame:
        import pandas as pd

        columns = list(Flagged.__dataclass_fields__)
        return pd.DataFrame([[getattr(f, c) for c in columns] for f in self.flagged], columns=columns)

    # ------------------------------------------------------------------ files

    def _join(self, path: Path, names: Sequence[str], stem: str) -> None:
        with path.open("wb") as out:
            out.write(header_line(names))
            for part in range(self.count):
                with (self.parts / f"{part:06d}.{stem}.csv").open("rb") as file:
                    shutil.copyfileobj(file, out, 1 << 20)

    def _value_fields(self) -> list[tuple[str, str, str | None]]:
        model = self.engine.model
        return [("snapshot", "string", None), *((model.names[c], "number", model.units[c]) for c in model.shown)]

    def _resource(self, stem: str, path: Path, fields: Sequence[tuple[str, str, str | None]]) -> dict[str, Any]:
        csv = path.suffix == ".csv"
        return {
            "name": stem if csv else f"{stem}-{path.suffix[1:]}",
            "path": path.name,
            "format": path.suffix[1:],
            **({"mediatype": "text/csv", "encoding": "utf-8"} if csv else {}),
            **_print_of(path),
            "schema": {
                "fields": [{"name": n, "type": t, **({"unit": u} if u is not None else {})} for n, t, u in fields],
                "missingValues": [export.MISSING],
            },
        }

    def _parquet(
        self,
        folder: Path,
        variables: Sequence[str],
        small: dict[str, pd.DataFrame],
        resources: dict[str, list[dict[str, Any]]],
    ) -> None:
        for stem in ("adjusted", "sigmas"):
            path = folder / f"{stem}.parquet"
            _row_groups(path, variables, self._numbers(stem))
            resources[stem].append(self._resource(stem, path, self._value_fields()))
        for stem, frame in small.items():
            path = folder / f"{stem}.parquet"
            export.WRITERS["parquet"](frame, path)
            resources[stem].append(self._resource(stem, path, _fields_of(frame)))

    def _numbers(self, stem: str) -> Any:
        for number in range(self.count):
            with np.load(self.parts / f"{number:06d}.npz") as arrays:
                values = arrays["values"] if stem == "adjusted" else arrays["sigmas"][arrays["pattern"]]
                yield arrays["labels"], values

    def _covariance(
        self,
        path: Path,
        variables: Sequence[str],
        ranked: Sequence[tuple[bytes, list[int]]],
        group_of: npt.NDArray[np.int64],
    ) -> None:
        arrays: dict[str, Any] = {"variables": np.array(variables, dtype=np.str_), "group_of_snapshot": group_of}
        if self.engine.batch is not None:
            for g, (code, _) in enumerate(ranked[:MOST_FACTORS]):
                arrays[f"factor_{g}"] = self.engine.batch.cover(self._absent(code))
        with path.open("wb") as file:
            np.savez(file, **arrays)

    # ------------------------------------------------------------------ summary

    def _summary(self, result: Result, chosen: Sequence[Told], patterns: int) -> dict[str, Any]:
        out = export.summary_of(result)
        notices = [*self._notices(result, patterns), *self._told_notices(chosen)]
        out["verdict"] = self._verdict()
        out["notices"] = [{"code": n.code, "message": n.message} for n in notices]
        out["campaign"] = {
            "snapshots": self.totals.size,
            "words": dict(sorted(self.words.items())),
            "suspicious": self.totals.suspicious,
            "explained": sum(t.suspicious for t in chosen),
            "flagged": [{c: getattr(f, c) for c in Flagged.__dataclass_fields__} for f in self.flagged],
            "cells_without_a_number": _nested(self.totals.counts),
            "patterns_of_absent_readings": patterns,
        }
        return out

    def _verdict(self) -> str:
        says = {
            "agrees": "agree",
            "watch": "to watch",
            "does not agree": "do not agree",
            "not solved": "could not be solved",
        }
        counted = ", ".join(f"{n} {says.get(w, w)}" for w, n in self.words.most_common())
        text = f"{self.totals.size} snapshots: {counted}."
        if self.flagged:
            f = self.flagged[0]
            text += f" Most often the largest test value: {f.meter} ({f.snapshots} of {self.totals.suspicious} beyond the limit)."
        return text

    def _told_notices(self, chosen: Sequence[Told]) -> list[Notice]:
        out = []
        explained = sum(t.suspicious for t in chosen)
        if self.totals.suspicious > explained:
            out.append(
                Notice(
                    "explained-in-part",
                    f"{self.totals.suspicious} snapshots are beyond their limit; {explained} of them are explained one by one "
                    f"(the strongest of each meter, {DETAILED} at most or one for each meter), the others are told by meter, "
                    "first and last snapshot in flagged.csv",
                )
            )
        if self.totals.size > DETAILED:
            out.append(
                Notice(
                    "tables-in-part",
                    "balances.csv, figures.csv and suspects.csv hold the explained snapshots and the first one only",
                )
            )
        return out

    def _notices(self, result: Result, patterns: int) -> list[Notice]:
        seen: list[Notice] = []
        of_files = [n for layout in self.log.layouts for n in layout.table.notices if n.code != "irregular-step"]
        of_result = [n for n in result.notices if n.code != "bound-violated"]
        for n in [*of_result, *of_files, *self.totals.notices, *self._cell_notices(), *self._bound_notices()]:
            if n not in seen:
                seen.append(n)
        if patterns > MOST_FACTORS:
            words = f"readings are absent in {patterns} patterns; the covariance of the {MOST_FACTORS} most frequent is written"
            seen.append(Notice("covariance-in-part", words))
        if len(self._exact) < sum(d > 0 for _, _, d in self.totals.patterns.values()):
            seen.append(
                Notice(
                    "limit-of-independent-tests",
                    "where rarely seen patterns of readings are absent, the largest test value was compared with the limit "
                    "for independent tests, which is never the smaller one: some snapshots to watch might not agree",
                )
            )
        return seen

    def _cell_notices(self) -> list[Notice]:
        return [
            Notice("readings-not-used", f"{tag}: {n} readings not used, {words}", Location(tag=tag))
            for (tag, words), n in sorted(self.totals.counts.items())
            if words != "no value"
        ]

    def _bound_notices(self) -> list[Notice]:
        from ..bounds import bound_notice

        return [
            bound_notice(
                self.case.model,
                self.case.parts.spec,
                int(self.case.model.shown[v]),
                word,
                int(n),
                worst,
                self.totals.size,
            )
            for (v, word), (n, worst) in sorted(self.totals.bounds.items())
        ]


_EVIDENCE = {
    "objective": "number",
    "checks": "integer",
    "limit": "number",
    "p_value": "number",
    "probability": "number",
}


def _nested(counts: Counter[tuple[str, str]]) -> dict[str, dict[str, int]]:
    out: dict[str, dict[str, int]] = {}
    for (tag, words), n in sorted(counts.items()):
        out.setdefault(tag, {})[words] = n
    return out


def _print_of(path: Path) -> dict[str, Any]:
    size, digest = fingerprint(path)
    return {"bytes": size, "hash": f"sha256:{digest}"}


def _fields_of(frame: pd.DataFrame) -> list[tuple[str, str, str | None]]:
    return [(str(c), export.KINDS.get(frame[c].dtype.kind, "string"), None) for c in frame.columns]


def _row_groups(path: Path, variables: Sequence[str], parts: Any) -> None:
    """Write row groups of one size, whatever the size of the parts."""
    from ..errors import MissingExtra

    try:
        import pyarrow as pa
        from pyarrow import parquet
    except ImportError:
        raise MissingExtra("pyarrow", "parquet", "writing Parquet") from None
    schema = pa.schema([("snapshot", pa.string()), *((v, pa.float64()) for v in variables)])
    held: list[Any] = []
    with parquet.ParquetWriter(path, schema) as writer:
        count = 0
        for labels, values in parts:
            columns = [
                pa.array(labels.tolist()),
                *(pa.array(np.ascontiguousarray(c), from_pandas=True) for c in values.T),
            ]
            held.append(pa.Table.from_arrays(columns, schema=schema))
            count += len(labels)
            while count >= ROW_GROUP:
                whole = pa.concat_tables(held).combine_chunks()
                writer.write_table(whole.slice(0, ROW_GROUP), row_group_size=ROW_GROUP)
                held, count = [whole.slice(ROW_GROUP)], count - ROW_GROUP
        if count:
            writer.write_table(pa.concat_tables(held).combine_chunks(), row_group_size=ROW_GROUP)


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


def put_in_place(folder: Path, target: Path, names: Sequence[str]) -> None:
    """Move finished files under their names, their description last."""
    for name in names:
        os.replace(folder / name, target / name)


def refuse_folders_in_the_way(target: Path, names: Sequence[str]) -> None:
    """Raise an `InputError` if a folder has the name of a file to be written."""
    for name in names:
        if (target / name).is_dir():
            raise InputError(
                Problem(
                    "cannot-write",
                    f"{str(target / name)!r} is a folder, where a file is to be written",
                    "nothing was written; move it, or choose another folder with --out",
                )
            )
