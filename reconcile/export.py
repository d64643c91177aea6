"""The corrected data set: values with uncertainties, evidence, provenance.

The files have fixed names, so that other programs can rely on them. They appear whole or not at all, carry no
time of writing, and are the same bytes on every run with the same input.
"""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import tempfile
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .errors import InputError, Problem

if TYPE_CHECKING:
    import pandas as pd

    from .results import Result
    from .trajectory import Trajectory

__all__ = ["summary_of", "write"]

Array = npt.NDArray[np.float64]

MISSING = ""
EVIDENCE_COLUMNS = (
    "snapshot", "objective", "checks", "limit", "p_value", "word", "explanation", "probability", "decision", "reason",
)  # fmt: skip
KINDS = {"b": "boolean", "i": "integer", "u": "integer", "f": "number"}


# ------------------------------------------------------------------ tables


def tables(result: Result) -> dict[str, pd.DataFrame]:
    """Every table of the data set by its file stem, in the order of the description."""
    from .campaign.tables import campaign_tables

    return {
        "adjusted": _values(result, result.adjusted),
        "sigmas": _values(result, result.sigmas),
        "variables": _variables(result),
        "evidence": _evidence(result),
        "suspects": _suspects(result),
        "balances": _balances(result),
        "figures": _figures(result),
        **campaign_tables(result),
    }


def _values(result: Result, values: Array) -> pd.DataFrame:
    import pandas as pd

    frame = pd.DataFrame(values, columns=list(result.variables))
    frame.insert(0, "snapshot", list(result.labels))
    return frame


def _adjusted_snapshots(result: Result) -> list[int]:
    return [i for i in range(result.size) if i not in result.table.failed]


def _variables(result: Result) -> pd.DataFrame:
    """One row per reading or unread variable; of many snapshots, the first that could be adjusted."""
    import pandas as pd

    from .snapshot_lines import FRAME_COLUMNS

    chosen = _adjusted_snapshots(result)[:1]
    rows = [r for i in chosen for r in result.snapshot(i).frame_rows()]
    return pd.DataFrame(rows, columns=list(FRAME_COLUMNS))


def _evidence(result: Result) -> pd.DataFrame:
    import pandas as pd

    from .report.campaign import why_not

    rows = []
    for i in range(result.size):
        if i in result.table.failed:
            rows.append(
                (
                    result.labels[i],
                    np.nan,
                    0,
                    np.nan,
                    np.nan,
                    why_not(result, i),
                    "",
                    np.nan,
                    "",
                    result.table.failed[i].message,
                )
            )
            continue
        named, probability = most_likely(result, i)
        rows.append(
            (
                result.labels[i],
                result.objective[i],
                int(result.checks[i]),
                result.limit[i],
                result.p_value[i],
                result.words[i],
                named,
                probability,
                decision_of(result, i),
                "" if result.checks[i] else "no check possible",
            )
        )
    return pd.DataFrame(rows, columns=list(EVIDENCE_COLUMNS))


def decision_of(result: Result, index: int) -> str:
    """Return what was done about a suspect in one snapshot: flagged unless the user chose otherwise."""
    if index in result.decisions:
        return result.decisions[index].words
    return "flagged" if result.suspicious[index] else ""


def most_likely(result: Result, index: int) -> tuple[str, float]:
    """Most likely explanation of one snapshot in short form, and its probability; empty where nothing is wrong."""
    if not result.suspicious[index]:
        return "", float("nan")
    from .report.words import short_name

    return short_name(result.snapshot(index))


def _suspects(result: Result) -> pd.DataFrame:
    import pandas as pd

    from .report.words import suspects_of

    columns = [
        "fault",
        "kind",
        "item",
        "unit",
        "size",
        "sigma",
        "probability",
        "tied_with",
        "first",
        "last",
        "snapshots",
    ]
    found: dict[str, list[Any]] = {}
    for i in _adjusted_snapshots(result):
        if not result.suspicious[i]:
            continue
        for s in suspects_of(result.snapshot(i)):
            if s.name in found:
                entry = found[s.name]
                entry[9] = result.labels[i]
                entry[10] += 1
            else:
                tied = " | ".join(s.tied_with)
                found[s.name] = [
                    s.name, s.kind, s.item, s.unit, s.size, s.sigma, s.probability, tied,
                    result.labels[i], result.labels[i], 1,
                ]  # fmt: skip
    return pd.DataFrame(list(found.values()), columns=columns)


def _balances(result: Result) -> pd.DataFrame:
    import pandas as pd

    from .closures import balances_of

    rows = [
        (result.labels[i], b.name, b.kind, b.unit, b.domain, b.before, b.spread, b.ratio, b.after, b.scale)
        for i in _adjusted_snapshots(result)
        for b in balances_of(result, i)
    ]
    columns = ["snapshot", "balance", "kind", "unit", "domain", "before", "spread", "ratio", "after", "largest_term"]
    return pd.DataFrame(rows, columns=columns)


def _figures(result: Result) -> pd.DataFrame:
    import pandas as pd

    rows = [
        (
            result.labels[i],
            f.name,
            f.text,
            f.value,
            f.sigma,
            f.raw,
            f.raw_sigma,
            f.diagonal_sigma,
            "; ".join(f"{k} {v:.4f}" for k, v in f.shares.items()),
            f.reason,
        )
        for i in _adjusted_snapshots(result)
        for f in result.figure_values(i)
    ]
    columns = [
        "snapshot", "figure", "formula", "value", "sigma", "raw", "raw_sigma", "sigma_without_covariance", "shares", "reason",
    ]  # fmt: skip
    return pd.DataFrame(rows, columns=columns)


# ------------------------------------------------------------------ summary


def summary_of(result: Result) -> dict[str, Any]:
    """Machine-readable summary of a result; safe for JSON.

    Parameters
    ----------
    result : Result

    Returns
    -------
    dict
        verdict, snapshots, suspects, not_checked, versions and hashes.
    """
    from .report.campaign import why_not
    from .report.words import suspects_of, verdict_line

    per_snapshot: list[dict[str, Any]] = []
    for i in range(result.size):
        if i in result.table.failed:
            per_snapshot.append(
                {"snapshot": result.labels[i], "status": why_not(result, i), "reason": result.table.failed[i].message}
            )
            continue
        named, probability = most_likely(result, i)
        per_snapshot.append(
            {
                "snapshot": result.labels[i],
                "status": "adjusted" if result.checks[i] else "no check possible",
                "word": result.words[i],
                "objective": _number(result.objective[i]),
                "checks": int(result.checks[i]),
                "limit": _number(result.limit[i]),
                "p_value": _number(result.p_value[i]),
                "explanation": named,
                "probability": _number(probability),
                "decision": decision_of(result, i),
                "suspects": [s.as_dict() for s in suspects_of(result.snapshot(i))] if result.suspicious[i] else [],
            }
        )
    first = _adjusted_snapshots(result)[:1]
    lines = result.snapshot(first[0]) if first else None
    return {
        "title": result.title,
        "verdict": verdict_line(result),
        "snapshots": per_snapshot,
        "not_checked": [r.tag for r in lines.readings if r.kind == "meter" and r.word == "not checked"]
        if lines
        else [],
        "cannot_be_calculated": [v.name for v in lines.variables if v.klass == "cannot be calculated"] if lines else [],
        "left_out": dict(result.excluded),
        "cautions": list(result.cautions),
        "notices": [{"code": n.code, "message": n.message} for n in result.notices],
        "settings": _settings(result),
        "provenance": dict(result.provenance),
        **({"history": result.history.to_dict()} if result.history.enough else {}),
    }


def _settings(result: Result) -> dict[str, Any]:
    s = result.settings
    return {k: getattr(s, k) for k in ("level", "power", "max_faults", "percent_at") if hasattr(s, k)}


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


# ------------------------------------------------------------------ files


@dataclass(frozen=True)
class Package:
    """What a corrected data set holds, whatever it came from.

    Attributes
    ----------
    title : str
    tables : mapping of file stem to DataFrame
    units : mapping of variable to unit
        For the columns of `adjusted` and `sigmas`.
    covariance : mapping of str to array
        ``variables``, ``group_of_snapshot`` and ``factor_0``, ``factor_1``, ...
    summary, provenance : mapping
    """

    title: str
    tables: Mapping[str, pd.DataFrame]
    units: Mapping[str, str]
    covariance: Mapping[str, Any]
    summary: Mapping[str, Any]
    provenance: Mapping[str, Any]


def package_of(result: Result | Trajectory) -> Package:
    """What `write` writes of a result."""
    from .trajectory import Trajectory

    if isinstance(result, Trajectory):
        from .export_trajectory import package_of_trajectory

        return package_of_trajectory(result)
    units = dict(zip(result.variables, result.units, strict=True))
    return Package(result.title, tables(result), units, _covariance(result), summary_of(result), result.provenance)


def write(result: Result | Trajectory, folder: str | Path, *, formats: tuple[str, ...] = ("csv",)) -> list[Path]:
    """Write the corrected data set.

    Parameters
    ----------
    result : Result or Trajectory
    folder : path
        Made if it is not there; files of the same names are replaced, others are left alone.
    formats : tuple of str
        ``csv`` and, where asked, ``parquet`` and ``xlsx`` (one workbook for people, a sheet a table).

    Returns
    -------
    list of Path
        The files, in the order of their description.

    Raises
    ------
    InputError
        If the folder cannot be written; nothing half-written is left.
    """
    target, package = Path(folder), package_of(result)
    try:
        target.mkdir(parents=True, exist_ok=True)
        part = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=target))
    except OSError as error:
        raise InputError(_cannot_write(target, error)) from None
    try:
        names = _write_all(package, part, formats)
        for name in names:
            os.replace(part / name, target / name)
        return [target / name for name in names]
    except OSError as error:
        raise InputError(_cannot_write(target, error)) from None
    finally:
        shutil.rmtree(part, ignore_errors=True)


def _cannot_write(target: Path, error: OSError) -> Problem:
    return Problem(
        "cannot-write",
        f"the folder {str(target)!r} cannot be written: {error.strerror or error}",
        "nothing was written; choose another folder with --out, or make room",
    )


def _write_all(content: Package, part: Path, formats: tuple[str, ...]) -> list[str]:
    made: list[str] = []
    resources = []
    for stem, frame in content.tables.items():
        for kind in (f for f in formats if f != "xlsx"):
            name = f"{stem}.{kind}"
            WRITERS[kind](frame, part / name)
            made.append(name)
            resources.append(_resource(stem, name, frame, part / name, content.units))
    with (part / "covariance.npz").open("wb") as file:
        np.savez(file, **dict(content.covariance))
    (part / "summary.json").write_text(json.dumps(content.summary, indent=2, ensure_ascii=False) + "\n", "utf-8")
    for name in ("covariance.npz", "summary.json"):
        made.append(name)
        resources.append({"name": Path(name).stem, "path": name, **fingerprint(part / name)})
    package = description(content.title, resources, dict(content.provenance))
    (part / "datapackage.json").write_text(json.dumps(package, indent=2, ensure_ascii=False) + "\n", "utf-8")
    made.append("datapackage.json")
    if "xlsx" in formats:
        from .export_workbook import write_workbook

        # It repeats the tables for people, and is no part of the described data.
        write_workbook(content.tables, part / "corrected.xlsx")
        made.append("corrected.xlsx")
    return made


def description(title: str, resources: list[dict[str, Any]], provenance: Mapping[str, Any]) -> dict[str, Any]:
    """Return the description of a data set by the open standard for table packages."""
    return {
        "$schema": "https://datapackage.org/profiles/2.0/datapackage.json",
        "name": "reconciled-readings",
        "title": title,
        "resources": resources,
        "provenance": dict(provenance),
    }


def _write_csv(frame: pd.DataFrame, path: Path) -> None:
    frame.to_csv(path, index=False, na_rep=MISSING, lineterminator="\n")


def _write_parquet(frame: pd.DataFrame, path: Path) -> None:
    from .errors import MissingExtra

    try:
        frame.to_parquet(path, index=False)
    except ImportError:
        raise MissingExtra("pyarrow", "parquet", "writing Parquet") from None


WRITERS: Mapping[str, Callable[[Any, Path], None]] = {"csv": _write_csv, "parquet": _write_parquet}


def fingerprint(path: Path) -> dict[str, Any]:
    data = path.read_bytes()
    return {"bytes": len(data), "hash": f"sha256:{hashlib.sha256(data).hexdigest()}"}


def _resource(stem: str, name: str, frame: pd.DataFrame, path: Path, known: Mapping[str, str]) -> dict[str, Any]:
    units = known if stem in ("adjusted", "sigmas") else {}
    fields = []
    for column in frame.columns:
        entry: dict[str, Any] = {"name": column, "type": KINDS.get(frame[column].dtype.kind, "string")}
        if column in units:
            entry["unit"] = units[column]
        fields.append(entry)
    csv = name.endswith(".csv")
    return {
        "name": stem if csv else f"{stem}-{Path(name).suffix[1:]}",
        "path": name,
        "format": Path(name).suffix[1:],
        **({"mediatype": "text/csv", "encoding": "utf-8"} if csv else {}),
        **fingerprint(path),
        "schema": {"fields": fields, "missingValues": [MISSING]},
    }


def _covariance(result: Result) -> dict[str, Any]:
    """Covariance of the adjusted variables, one for each group of snapshots that share it."""
    shown = result.model.shown
    groups = list(result.table.groups)
    group_of = result.table.group_of.copy()
    for i, decision in result.decisions.items():
        group_of[i] = len(groups)
        groups.append(decision.granted.group)
    arrays: dict[str, Any] = {
        "variables": np.array(result.variables, dtype=np.str_),
        "group_of_snapshot": group_of,
    }
    for g, group in enumerate(groups):
        arrays[f"factor_{g}"] = group.cover[shown]
    return arrays
