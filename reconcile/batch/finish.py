"""From parts to the data set: evidence in words, explanations of the snapshots worth it, files under their names."""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Sequence
from dataclasses import asdict, dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .. import export
from ..errors import InputError, MissingExtra, Problem
from ..readings.table import ReadingsTable, Status
from .account import Account
from .evidence import MOST_FACTORS, Evidence, Flagged
from .lines import header_line
from .pieces import Log
from .totals import Told, Totals
from .work import Engine, fingerprint

if TYPE_CHECKING:
    import pandas as pd

    from ..results import Result
    from ..run import Case

__all__ = ["Finish", "put_in_place", "refuse_folders_in_the_way"]

ROW_GROUP = 1 << 16
_OF_CHOSEN = ("variables", "suspects", "balances", "figures")


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
        evidence = Evidence(self.engine, self.totals, self.parts, self.count, self.settings.level)
        evidence.exact_limits(ranked)
        tables = export.tables(result)
        resources: dict[str, list[dict[str, Any]]] = {}
        variables = [self.engine.model.names[c] for c in self.engine.model.shown]
        for stem in ("adjusted", "sigmas"):
            path = folder / f"{stem}.csv"
            self._join(path, ["snapshot", *variables], stem)
            resources[stem] = [self._resource(stem, path, self._value_fields())]
        group_of = evidence.write(folder / "evidence.csv", chosen, tables["evidence"] if chosen else None, number)
        self.flagged = evidence.flagged
        evidence_fields = [(c, _EVIDENCE.get(c, "string"), None) for c in export.EVIDENCE_COLUMNS]
        resources["evidence"] = [self._resource("evidence", folder / "evidence.csv", evidence_fields)]
        small = {k: v for k, v in tables.items() if k in _OF_CHOSEN}
        small["flagged"] = evidence.frame()
        for stem, frame in small.items():
            export.WRITERS["csv"](frame, folder / f"{stem}.csv")
            resources[stem] = [self._resource(stem, folder / f"{stem}.csv", _fields_of(frame))]
        if "parquet" in self.formats:
            self._parquet(folder, variables, small, resources)
        self._covariance(
            folder / "covariance.npz", variables, [evidence.absent(code) for code, _ in ranked[:MOST_FACTORS]], group_of
        )
        summary = Account(self.case, self.log, self.totals, evidence).summary(result, chosen, len(ranked))
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
        result = self.case.run(table, exclude=self.exclude, **asdict(self.settings))
        return replace(result, provenance=self.provenance)

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
        patterns: Sequence[npt.NDArray[np.bool_]],
        group_of: npt.NDArray[np.int64],
    ) -> None:
        arrays: dict[str, Any] = {"variables": np.array(variables, dtype=np.str_), "group_of_snapshot": group_of}
        if self.engine.batch is not None:
            for g, absent in enumerate(patterns):
                arrays[f"factor_{g}"] = self.engine.batch.cover(absent)
        with path.open("wb") as file:
            np.savez(file, **arrays)


_EVIDENCE = {
    "objective": "number",
    "checks": "integer",
    "limit": "number",
    "p_value": "number",
    "probability": "number",
}


def _print_of(path: Path) -> dict[str, Any]:
    size, digest = fingerprint(path)
    return {"bytes": size, "hash": f"sha256:{digest}"}


def _fields_of(frame: pd.DataFrame) -> list[tuple[str, str, str | None]]:
    return [(str(c), export.KINDS.get(frame[c].dtype.kind, "string"), None) for c in frame.columns]


def _row_groups(path: Path, variables: Sequence[str], parts: Any) -> None:
    """Write row groups of one size, whatever the size of the parts."""
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
