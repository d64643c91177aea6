"""Which column of a source is the time, which a name, which a reading, and which fits nothing."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from ..errors import Location, Notice, Problems, did_you_mean
from .cells import clean
from .options import ReadOptions
from .units_words import split_header_unit

__all__ = ["Roles", "looks_dated", "match_columns"]

_DATE = re.compile(r"\d{4}[-/.]\d{1,2}[-/.]\d{1,2}\b|\d{1,2}[-/.]\d{1,2}[-/.]\d{4}\b")

TIME_NAMES = frozenset({"time", "timestamp", "datetime", "date", "date time", "date_time", "stamp", "date/time"})
LABEL_NAMES = frozenset(
    {"snapshot", "label", "window", "sample", "run", "experiment", "batch", "id", "row", "no", "name"}
)
NOTE_NAMES = frozenset({"note", "notes", "remark", "remarks", "comment", "comments"})


@dataclass
class Roles:
    """Position of each column by its role.

    Attributes
    ----------
    tags : dict of tag to position
        In the order expected; None for an expected tag without a column.
    time, label : int, optional
    keep : dict of header to position
    ignored : list of str
    units : dict of tag to str
        Units found in the headers.
    notices : list of Notice
    """

    tags: dict[str, int | None] = field(default_factory=dict)
    time: int | None = None
    label: int | None = None
    keep: dict[str, int] = field(default_factory=dict)
    ignored: list[str] = field(default_factory=list)
    units: dict[str, str] = field(default_factory=dict)
    notices: list[Notice] = field(default_factory=list)


def match_columns(
    header: Sequence[str],
    columns: Sequence[Any],
    options: ReadOptions,
    file: str,
    line: int | None,
    problems: Problems,
) -> Roles:
    """Give each column its role.

    A column that fits no expected tag is refused when its name is close to a tag that has no column (a slip of
    the pen), and left out with a notice when it is not.
    """
    place = Location(file, line)
    names = [clean(h) for h in header]
    roles = Roles()
    taken: set[int] = set()
    _duplicates(names, columns, place, problems, taken)
    expected = None if options.expected is None else list(options.expected)
    roles.time = _named(names, options.time_column, "time_column", place, problems)
    roles.label = _named(names, options.label_column, "label_column", place, problems)
    taken.update(i for i in (roles.time, roles.label) if i is not None)
    for name in (*options.keep, *options.ignore):
        found = _named(names, name, "keep" if name in options.keep else "ignore", place, problems)
        if found is not None:
            taken.add(found)
            if name in options.keep:
                roles.keep[name] = found
            else:
                roles.ignored.append(name)
    for i, name in enumerate(names):
        if i in taken:
            continue
        folded = name.casefold()
        if expected is not None and _tag_of(name, expected) is not None:
            continue
        if folded in NOTE_NAMES:
            roles.keep[name] = i
        elif roles.time is None and folded in TIME_NAMES:
            roles.time = i
        elif roles.label is None and options.label_column is None and folded in LABEL_NAMES:
            roles.label = i
        else:
            continue
        taken.add(i)
    rest = [i for i in range(len(names)) if i not in taken]
    if roles.time is None and options.time_column is None:
        roles.time = next(
            (i for i in rest if looks_dated(columns[i]) and _tag_of(names[i], expected or ()) is None), None
        )
        rest = [i for i in rest if i != roles.time]
    if expected is None:
        for i in rest:
            _unexpected(names[i], i, roles)
        return roles
    _expected(names, rest, expected, roles, options, place, problems)
    return roles


def looks_dated(column: Any) -> bool:
    """Tell a column of stamps by its first cells, whatever its name."""
    if not isinstance(column, list):
        return not isinstance(column, np.ndarray)
    first = [clean(c) for c in column[:5]]
    return bool(first) and all(_DATE.match(c) for c in first)


def _tag_of(name: str, expected: Sequence[str]) -> tuple[str, str | None] | None:
    """Return (tag, unit) when a header is an expected tag, with or without a unit in brackets."""
    if name in expected:
        return name, None
    parts = split_header_unit(name)
    if parts is not None and parts[0] in expected:
        return parts
    return None


def _unexpected(name: str, position: int, roles: Roles) -> None:
    parts = split_header_unit(name)
    tag = name if parts is None else parts[0]
    if tag in roles.tags:
        tag = name
    elif parts is not None:
        roles.units[tag] = parts[1]
    roles.tags[tag] = position


def _expected(
    names: Sequence[str],
    rest: Sequence[int],
    expected: Sequence[str],
    roles: Roles,
    options: ReadOptions,
    place: Location,
    problems: Problems,
) -> None:
    found: dict[str, int] = {}
    stray = []
    for i in rest:
        match = _tag_of(names[i], expected)
        if match is None:
            stray.append(i)
            continue
        tag, unit = match
        if tag in found:
            problems.add(
                "duplicate-column",
                f"columns {found[tag] + 1} and {i + 1} are both {tag!r}",
                "rename one, or declare two meters on the same stream",
                place,
            )
            continue
        found[tag] = i
        if unit is not None:
            roles.units[tag] = unit
    missing = [tag for tag in expected if tag not in found]
    claimed: set[str] = set()
    for i in stray:
        near = did_you_mean(names[i], missing) if names[i] else ""
        if near:
            tag = near.removeprefix("did you mean '").removesuffix("'?")
            claimed.add(tag)
            problems.add(
                "column-unknown",
                f"column {names[i]!r} matches no meter, and meter {tag!r} has no column",
                near,
                Location(place.file, place.line, i + 1, None, names[i]),
            )
        else:
            roles.ignored.append(names[i])
    if roles.ignored and (strays := [names[i] for i in stray if names[i] in roles.ignored]):
        words = ", ".join(repr(s) for s in strays[:8]) + (f" and {len(strays) - 8} more" if len(strays) > 8 else "")
        roles.notices.append(Notice("column-ignored", f"no meter has these columns, so they are left out: {words}"))
    for tag in missing:
        if tag in claimed:
            continue
        if options.missing_columns == "refuse":
            columns = [n for i, n in enumerate(names) if i in stray]
            hint = did_you_mean(tag, columns) or "add the column, or declare missing_columns = notice to run without it"
            problems.add("column-missing", f"meter {tag!r} has no column", hint, place)
        else:
            roles.notices.append(Notice("column-missing", f"meter {tag!r} has no column: no reading in any row"))
    roles.tags = {tag: found.get(tag) for tag in expected}


def _named(names: Sequence[str], name: str | None, option: str, place: Location, problems: Problems) -> int | None:
    if name is None:
        return None
    if name in names:
        return names.index(name)
    hint = did_you_mean(name, names) or f"the columns are: {', '.join(names[:12])}"
    problems.add("column-missing", f"{option} names column {name!r}, which is not there", hint, place)
    return None


def _duplicates(
    names: Sequence[str], columns: Sequence[Any], place: Location, problems: Problems, taken: set[int]
) -> None:
    first: dict[str, int] = {}
    for i, name in enumerate(names):
        if not name:
            problems.add("column-unnamed", f"column {i + 1} has cells, but no name", "give it a name", place)
            taken.add(i)
        elif name in first:
            a, b = columns[first[name]], columns[i]
            differ = _differences(a, b)
            words = f"with different values in {differ} rows" if differ else "with the same values in every row"
            problems.add(
                "duplicate-column",
                f"column {name!r} appears twice ({first[name] + 1} and {i + 1}) {words}",
                "rename one, or declare two meters on the same stream" if differ else "remove one of them",
                place,
            )
            taken.add(i)
        else:
            first[name] = i


def _differences(a: Any, b: Any) -> int:
    if isinstance(a, np.ndarray) and isinstance(b, np.ndarray) and a.dtype.kind in "fiu" and b.dtype.kind in "fiu":
        return int(np.sum(~((a == b) | (np.isnan(a.astype(float)) & np.isnan(b.astype(float))))))
    return sum(str(x).strip() != str(y).strip() for x, y in zip(a, b, strict=True))
