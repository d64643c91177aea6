"""Long tables: a row a value (time, tag, value, perhaps unit and status), turned into a column a tag."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import Location, Notice, Problems, did_you_mean
from .assemble import RawTable, assemble
from .cells import clean
from .columns import TIME_NAMES
from .options import CappedProblems, ReadOptions
from .table import ReadingsTable

__all__ = ["pivot_long", "read_long_csv"]

_NAMES: dict[str, tuple[str, ...]] = {
    "time": tuple(sorted(TIME_NAMES)),
    "tag": ("tag", "meter", "point", "channel", "signal", "name", "tagname", "tag_name"),
    "value": ("value", "reading", "val", "result"),
    "unit": ("unit", "units", "uom"),
    "status": ("status", "quality", "flag", "state"),
}


@dataclass(frozen=True)
class _Long:
    time: int
    tag: int
    value: int
    unit: int | None
    status: int | None


def read_long_csv(path: str | Path, **options: Any) -> ReadingsTable:
    """Read a CSV file with a row a value.

    Parameters
    ----------
    path : str or Path
    **options
        Fields of `ReadOptions`.

    Raises
    ------
    InputError
    """
    import hashlib

    from .csv_source import raw_from_records, read_bytes
    from .csv_text import choose_delimiter, decode, split_records

    settings = ReadOptions.build(options)
    name = str(path)
    problems = CappedProblems(name)
    data = read_bytes(Path(path), problems)
    decoded = decode(data, settings.encoding, problems)
    problems.raise_if_any()
    assert decoded is not None
    delimiter = settings.delimiter or choose_delimiter(decoded.text, problems)
    problems.raise_if_any()
    assert delimiter is not None
    records = split_records(decoded.text, delimiter, problems)
    # The tags stand in the cells here, so the header is not looked for by them.
    raw = raw_from_records(records, name, delimiter, replace(settings, expected=None, units_row=False), problems)
    raw.source_hash = hashlib.sha256(data).hexdigest()
    raw.echo.insert(0, f"{name}: {len(data)} bytes, sha256 {raw.source_hash[:12]}..., {decoded.encoding}")
    return pivot_long(raw, settings, problems)


def pivot_long(raw: RawTable, options: ReadOptions, problems: Problems) -> ReadingsTable:
    """Turn a long table into a wide one.

    Each stamp becomes a row. A value whose status is not one of `good_status` becomes a cell marked bad by its
    source; a pair of stamp and tag that comes twice is refused.

    Raises
    ------
    InputError
    """
    roles = _roles(raw, options, problems)
    problems.raise_if_any()
    assert roles is not None
    tags = _texts(raw.columns[roles.tag])
    order = list(dict.fromkeys(tags))
    expected = list(options.expected) if options.expected is not None else order
    _check_tags(raw, order, expected, options, problems)
    stamps = _texts(raw.columns[roles.time])
    rows = {stamp: i for i, stamp in enumerate(dict.fromkeys(stamps))}
    position = {tag: j for j, tag in enumerate(expected)}
    values, bad_words = _judged(raw, roles, options)
    grid = [[""] * len(rows) for _ in expected]
    origin: dict[tuple[int, int], int] = {}
    first_line = [0] * len(rows)
    for n in range(len(values) - 1, -1, -1):
        first_line[rows[stamps[n]]] = n
    for n, (stamp, tag) in enumerate(zip(stamps, tags, strict=True)):
        j = position.get(tag)
        if j is None:
            continue
        cell = (rows[stamp], j)
        if cell in origin:
            if options.duplicates == "refuse":
                words = f"{tag} at {stamp} is there already, in row {origin[cell] + 1}"
                problems.add("duplicate-stamp", words, "remove one, or declare duplicates", raw.where(n, tag=tag))
                continue
            if options.duplicates == "first":
                continue
        origin[cell] = n
        grid[j][cell[0]] = values[n]
    units = _units(raw, roles, tags, expected, problems)
    lines = None if raw.lines is None else [int(raw.lines[n]) for n in first_line]
    wide = RawTable(
        raw.file,
        ["time", *expected],
        [list(rows), *grid],
        lines,
        raw.header_line,
        ["", *(units.get(t, "") for t in expected)] if units else None,
        raw.marks,
        [*raw.echo, f"long table: {len(values)} values of {len(order)} tags at {len(rows)} stamps"],
        list(raw.notices),
        raw.source_hash,
    )
    # Long tables come tag by tag as often as stamp by stamp, so their order says nothing.
    settings = replace(
        options,
        expected=expected,
        time_column="time",
        label_column=None,
        keep=(),
        ignore=(),
        sort=True,
        bad_words=(*options.bad_words, *bad_words),
    )
    table = assemble(wide, settings, problems)
    return replace(table, notices=tuple(n for n in table.notices if n.code not in ("rows-sorted", "file-cleaned")))


def _judged(raw: RawTable, roles: _Long, options: ReadOptions) -> tuple[list[str], set[str]]:
    """Return the values as text, those of a bad status replaced by words that no number can be."""
    values = _texts(raw.columns[roles.value])
    if roles.status is None:
        return values, set()
    good = {w.casefold() for w in options.good_status}
    good |= {f"{w}.0" for w in good if w.isdigit()}
    bad_words = set()
    for n, word in enumerate(_texts(raw.columns[roles.status])):
        if word.casefold() not in good:
            values[n] = f"status {word}"
            bad_words.add(values[n])
    if bad_words:
        bad = sum(v in bad_words for v in values)
        words = f"{bad} values are marked bad by their source ({', '.join(sorted(bad_words)[:5])})"
        raw.notices.append(Notice("source-status", words, Location(raw.file)))
    return values, bad_words


def _texts(column: Any) -> list[str]:
    if isinstance(column, list):
        return [clean(c) for c in column]
    if isinstance(column, np.ndarray):
        return ["" if np.isnan(v) else repr(float(v)) for v in column]
    return [stamp.isoformat() for stamp in column]


def _roles(raw: RawTable, options: ReadOptions, problems: Problems) -> _Long | None:
    header = [clean(h) for h in raw.header]
    folded = [h.casefold() for h in header]
    place = Location(raw.file, raw.header_line)
    found: dict[str, int | None] = {}
    for role, names in _NAMES.items():
        declared = getattr(options, f"{role}_column")
        if declared is not None:
            found[role] = header.index(declared) if declared in header else None
            if found[role] is None:
                hint = did_you_mean(declared, header) or f"the columns are: {', '.join(header)}"
                problems.add("column-missing", f"{role}_column names {declared!r}, which is not there", hint, place)
            continue
        found[role] = next((folded.index(n) for n in names if n in folded), None)
        if found[role] is None and role in ("time", "tag", "value"):
            words = f"a long table needs a column with the {role}"
            problems.add("column-missing", words, f"name it {role!r}, or declare {role}_column", place)
    if problems or found["time"] is None or found["tag"] is None or found["value"] is None:
        return None
    return _Long(found["time"], found["tag"], found["value"], found["unit"], found["status"])


def _check_tags(
    raw: RawTable, order: Sequence[str], expected: Sequence[str], options: ReadOptions, problems: Problems
) -> None:
    known = set(expected)
    missing = [t for t in expected if t not in set(order)]
    stray = []
    for tag in order:
        if tag in known:
            continue
        near = did_you_mean(tag, missing)
        if near:
            words = f"tag {tag!r} of the table matches no meter"
            problems.add("column-unknown", words, near, Location(raw.file, tag=tag))
        else:
            stray.append(tag)
    if stray:
        words = f"no meter has these tags, so they are left out: {', '.join(map(repr, stray[:8]))}"
        raw.notices.append(Notice("column-ignored", words + (" ..." if len(stray) > 8 else ""), Location(raw.file)))
    for tag in missing:
        if options.missing_columns == "refuse":
            hint = "add them, or declare missing_columns = notice"
            problems.add("column-missing", f"meter {tag!r} has no rows", hint, Location(raw.file, tag=tag))
        else:
            raw.notices.append(Notice("column-missing", f"meter {tag!r} has no rows", Location(raw.file)))


def _units(
    raw: RawTable, roles: _Long, tags: Sequence[str], expected: Sequence[str], problems: Problems
) -> dict[str, str]:
    if roles.unit is None:
        return {}
    units: dict[str, str] = {}
    known = set(expected)
    for n, (tag, unit) in enumerate(zip(tags, _texts(raw.columns[roles.unit]), strict=True)):
        if tag not in known or not unit:
            continue
        if units.setdefault(tag, unit) != unit:
            words = f"{tag} is in {unit} here, and in {units[tag]} before"
            problems.add("unit-differs", words, "convert the values to one unit", raw.where(n, tag=tag))
    return units
