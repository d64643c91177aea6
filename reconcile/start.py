"""From a table of readings to the skeleton of a case: what its columns suggest, and what only the user can say.

Nothing is decided silently: a sigma that the scatter suggests is written as a marked guess, and what could not be told
from the table stands as ``FILL_IN``, which no case may keep.
"""

from __future__ import annotations

import math
import os
import re
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from .case.unfilled import FILL_IN
from .errors import InputError, Location, Notice, Problem
from .readings.sources import read_readings
from .readings.table import ReadingsTable
from .units import UnitProblem, describe_kind, parse_unit

__all__ = ["Column", "Started", "start_case"]

Array = npt.NDArray[np.float64]

FLOWS = (
    "mass per time",
    "volume per time",
    "amount per time",
    "normal gas volume per time",
    "standard gas volume per time",
)
_WORDS: dict[str, tuple[str, ...]] = {
    "temperature": ("temp", "temperature", "ti", "tt", "te"),
    "level": ("level", "lt", "li", "lic", "tank"),
    "pressure": ("pressure", "pt", "pi", "pic", "dp"),
    "counter": ("total", "totaliser", "totalizer", "counter", "count", "fq", "fqi", "cum", "cumulative"),
    "flow": ("flow", "ft", "fi", "fic", "fe", "fit"),
}


@dataclass(frozen=True)
class Column:
    """What one column of the table suggests.

    Attributes
    ----------
    name, unit : str
        Header and unit; an empty unit where the table names none.
    kind : str
        ``flow``, ``counter``, ``level``, ``percent``, ``temperature``, ``pressure``, ``concentration``, ``amount`` or
        ``not known``.
    why : str
        What that was told from.
    sigma : str
        Marked guess, as it is written into a case.
    basis : str
        What the guess rests on.
    low, high : float
        Smallest and largest value; nan without one.
    count : int
        Cells with a number.
    """

    name: str
    unit: str
    kind: str
    why: str
    sigma: str
    basis: str
    low: float
    high: float
    count: int


@dataclass(frozen=True)
class Started:
    """A skeleton of a case.

    Attributes
    ----------
    text : str
    columns : tuple of Column
    to_fill : tuple of int
        Lines that the user has to fill in, counted from 1.
    echo : tuple of str
        What was understood of the table.
    notices : tuple of Notice
    path : Path or None
        Where it was written.
    """

    text: str
    columns: tuple[Column, ...]
    to_fill: tuple[int, ...]
    echo: tuple[str, ...]
    notices: tuple[Notice, ...]
    path: Path | None = None


def start_case(
    readings: str | Path | Sequence[str | Path],
    out: str | Path | None = None,
    *,
    readers: Mapping[str, Callable[..., ReadingsTable]] | None = None,
    **options: Any,
) -> Started:
    """Write the skeleton of a case for a table of readings.

    Parameters
    ----------
    readings : path, list of paths, pattern or URL
        Whatever `read_readings` reads.
    out : path, optional
        The file to write; nothing is written when left out.
    readers : mapping, optional
        Further readers, e.g. of plugins.
    **options
        How the table is read; they are kept in the skeleton.

    Returns
    -------
    Started

    Raises
    ------
    InputError
        If the table cannot be read, or the file exists.
    """
    target = None if out is None else Path(out)
    if target is not None and target.exists():
        raise InputError(
            Problem(
                "file-exists",
                f"{str(target)!r} is there already, and is not overwritten",
                "name another file with --out, or move the old one away",
                Location(file=str(target)),
            )
        )
    table = read_readings(readings, readers=readers, **options)
    columns = tuple(_column(table, name) for name in table.columns)
    text = _skeleton(table, columns, _named(readings, target), options)
    to_fill = tuple(i for i, line in enumerate(text.split("\n"), 1) if FILL_IN in line.split("#", 1)[0])
    if target is not None:
        _write(target, text)
    return Started(text, columns, to_fill, table.echo, table.notices, target)


def _named(readings: str | Path | Sequence[str | Path], target: Path | None) -> str:
    """How the skeleton names its readings: beside itself where possible."""
    if not isinstance(readings, (str, Path)):
        return str(readings[0])
    text = str(readings)
    if "://" in text or target is None:
        return text
    return Path(os.path.relpath(text, target.parent)).as_posix()


def _write(target: Path, text: str) -> None:
    part = target.with_name(f".{target.name}.unfinished-{os.getpid()}")
    try:
        part.write_text(text, encoding="utf-8")
        # A link, unlike a replacement, fails if somebody wrote the file meanwhile.
        os.link(part, target)
    except OSError as error:
        raise InputError(
            Problem(
                "cannot-write",
                f"{str(target)!r} cannot be written: {error.strerror or error}",
                "nothing was written; choose another file with --out",
            )
        ) from None
    finally:
        part.unlink(missing_ok=True)


# ------------------------------------------------------------------ what a column suggests


def _column(table: ReadingsTable, name: str) -> Column:
    values = np.where(table.usable, table.values, np.nan)[:, table.columns.index(name)]
    given = values[np.isfinite(values)]
    unit, remark = _unit(table.units.get(name, ""))
    kind, why = _kind(name, unit, given)
    if kind == "counter":
        sigma, basis = "default(1 % of reading)", "a total says nothing of the scatter of what passes"
    else:
        sigma, basis = _guess(given, unit)
    low, high = (float(given.min()), float(given.max())) if given.size else (math.nan, math.nan)
    return Column(name, unit, kind, "; ".join(w for w in (why, remark) if w), sigma, basis, low, high, given.size)


def _unit(stated: str) -> tuple[str, str]:
    """Unit that can be read, and a remark if the stated one cannot."""
    try:
        parse_unit(stated)
    except UnitProblem as problem:
        return "", f"unit {stated!r} is not understood ({problem.hint or problem.message})"
    return stated, ""


def _kind(name: str, unit: str, given: Array) -> tuple[str, str]:
    """Kind of a quantity by its unit, then by its values, then by its header."""
    words = set(re.findall(r"[a-z]+", name.casefold()))
    by_name = next((k for k, known in _WORDS.items() if words & set(known)), "")
    of_unit = describe_kind(unit) if unit else ""
    rising = given.size >= 4 and bool(np.all(np.diff(given) >= 0)) and bool(np.mean(np.diff(given) > 0) > 0.7)
    if of_unit.removesuffix(", dry").removesuffix(", wet") in FLOWS:
        return "flow", f"{of_unit}, by its unit"
    if (
        of_unit in ("mass", "volume", "amount", "normal gas volume", "energy", "plain number", "")
        and (
            by_name == "counter"
            or (rising and by_name != "level" and (of_unit or given[-1] - given[0] > 10 * (given[1] - given[0])))
        )
        and unit != "%"
    ):
        return "counter", "never falls" + (
            ", and its header says a total" if by_name == "counter" else ""
        ) if rising else ("its header says a total, though it falls")
    if of_unit == "temperature":
        return "temperature", "by its unit"
    if of_unit.endswith("pressure"):
        return "pressure", f"{of_unit}, by its unit"
    if by_name == "level" and (unit == "%" or of_unit in ("length", "mass", "volume", "plain number", "")):
        return "level", "by its header"
    if of_unit == "length":
        return "level", "a length, by its unit"
    if unit == "%" or of_unit.endswith("fraction"):
        return "percent", "by its unit: a level, an opening or a composition?"
    if of_unit.endswith("per volume"):
        return "concentration", f"{of_unit}, by its unit"
    if of_unit in ("mass", "volume", "amount", "energy"):
        return "amount", f"{of_unit}, by its unit"
    if unit:
        return "not known", f"{of_unit or unit} is no flow"
    return (by_name, "by its header; the table names no unit") if by_name else ("not known", "the table names no unit")


def _guess(given: Array, unit: str) -> tuple[str, str]:
    """Marked guess of a sigma from scatter between neighbours and from the step of the display.

    The scatter is the median of the differences of neighbours over 0.6745 sqrt(2), so that a drift or a step does not
    count (robust scale of a normal distribution); the step gives its rectangular standard uncertainty (GUM F.2.2.1).
    """
    scatter = float(np.median(np.abs(np.diff(given)))) / (0.6745 * math.sqrt(2)) if given.size >= 5 else 0.0
    steps = np.diff(np.unique(given))
    step = float(steps.min()) / math.sqrt(12) if steps.size >= 5 else 0.0
    size = math.hypot(scatter, step)
    if not size > 0:
        return "default(2 % of reading)", "too few values, or no scatter to tell from"
    words = (
        f"scatter {_rounded(scatter)}, step {_rounded(step * math.sqrt(12))}"
        if step
        else f"scatter {_rounded(scatter)}"
    )
    return f"default({_rounded(size)} {unit})".replace(" )", ")"), f"{words}; calibration is not in it"


def _rounded(value: float) -> str:
    return f"{float(f'{value:.2g}'):g}"


# ------------------------------------------------------------------ the text


def _skeleton(table: ReadingsTable, columns: Sequence[Column], file: str, options: Mapping[str, Any]) -> str:
    flows, unit, why = _flows(columns)
    width = max((len(_key(c.name)) for c in flows), default=0) + 1
    streams = dict(zip((c.name for c in flows), _slugs(flows), strict=True))
    out = [
        "# Skeleton of a case. Lines with FILL_IN are yours to fill in; `reconcile check` says which are left.",
        "reconcile: 1",
        f"title: {_quoted('Case for ' + Path(file).name)}",
        "domains:",
        f"  fluid: {{unit: {unit}}}" + f"   # {why}",
        "streams:   # name: from -> to; 'outside' is the environment; what no meter reads belongs here, too",
    ]
    slug_width = max((len(s) for s in streams.values()), default=0) + 1
    for name, slug in streams.items():
        out.append(f"  {slug + ':':{slug_width}} {FILL_IN} -> {FILL_IN}   # read by {name}")
    if not streams:
        out.append(f"  stream_1: {FILL_IN} -> {FILL_IN}   # no column of the table is a flow")
    out.append("meters:   # every sigma is a guess that the results will mark: replace it by what the data sheet says")
    for c in flows:
        own = c.unit or FILL_IN
        sigma = c.sigma if c.unit or "%" in c.sigma else "default(2 % of reading)"
        out.append(
            f"  {_key(c.name) + ':':{width}} {{reads: {streams[c.name]}.flow, unit: {own}, sigma: {sigma}}}"
            f"   # {c.basis}; values {c.low:g} to {c.high:g}; {c.why}"
        )
    if not flows:
        out[-1] = "meters: {}"
    out += [line for c in columns if c not in flows for line in _comment(c)]
    out += _readings(table, file, options)
    return "\n".join(out) + "\n"


def _flows(columns: Sequence[Column]) -> tuple[list[Column], str, str]:
    """Columns that become meters, the unit of the domain, and why that one: the commonest kind of flow."""
    known = [c for c in columns if c.kind == "flow" and c.unit]
    bare = [c for c in columns if not c.unit and c.kind in ("flow", "not known")]
    if not known:
        return bare, FILL_IN, "the table names no unit of a flow, e.g. kg/h"
    kinds = Counter(describe_kind(c.unit) for c in known)
    kind = kinds.most_common(1)[0][0]
    chosen = [c for c in known if describe_kind(c.unit) == kind]
    unit = Counter(c.unit for c in chosen).most_common(1)[0][0]
    return chosen, unit, f"most flows are {kind}"


_HINTS = {
    "flow": "another kind of flow than the others: give the streams their density, or leave it out",
    "counter": "a counter? Then: reads a flow, and reading: {counter: {}} with windows: that say over which time",
    "level": "a level? It reads what a tank holds: nodes: {TANK: {stores: true}} and trajectory: or reading: {level: ...}",
    "percent": "percent of what? A composition is read by the domain mixture",
    "temperature": "a temperature is read by the domain energy",
    "pressure": "a pressure is read by fluid where streams have a resistance",
    "concentration": "a concentration is read by the domain mixture, elements or charge",
    "amount": "an amount that is no flow: a weighed tank? See trajectory:",
    "not known": "what it is could not be told",
}


def _comment(c: Column) -> list[str]:
    values = f"values {c.low:g} to {c.high:g}" if c.count else "no values"
    return [
        f"  # {c.name}: {c.kind} ({c.why}); {values}; {_HINTS[c.kind]}",
        f"  # {_key(c.name)}: {{reads: ..., unit: {c.unit or '...'}, sigma: {c.sigma}}}",
    ]


def _readings(table: ReadingsTable, file: str, options: Mapping[str, Any]) -> list[str]:
    given = {k: v for k, v in options.items() if v is not None}
    out = []
    if table.time is None:
        out.append("# no time column: rows are snapshots in their own right")
    else:
        zone = table.time.tz
        span = f"{table.time.min()} to {table.time.max()}"
        text = f"# times {span}, " + (
            f"zone {zone}" if zone is not None else "no zone: add zone: Europe/Berlin or the like"
        )
        out.append(f"{text}; interval: start, end or centre says where in its interval a stamp stands")
    if not given:
        return [*out, f"readings: {_quoted(file)}"]
    lines = [f"  {k}: {_value(v)}" for k, v in given.items()]
    return [*out, "readings:", f"  file: {_quoted(file)}", *lines]


def _value(value: Any) -> str:
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, (list, tuple)):
        return f"[{', '.join(_quoted(str(v)) for v in value)}]"
    return _quoted(str(value))


def _quoted(text: str) -> str:
    """Text as a YAML scalar that stays a text."""
    if re.fullmatch(r"[A-Za-z][\w ./\-]*", text) and text.casefold() not in (
        "true",
        "false",
        "null",
        "yes",
        "no",
        "on",
        "off",
    ):
        return text.rstrip() if text == text.strip() else f'"{text}"'
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def _key(name: str) -> str:
    return _quoted(name)


def _slugs(columns: Sequence[Column]) -> list[str]:
    """Names of streams, made from headers: letters, digits and underscores, each once."""
    out: list[str] = []
    for c in columns:
        slug = re.sub(r"\W+", "_", c.name.casefold(), flags=re.ASCII).strip("_") or "stream"
        slug = slug if slug[0].isalpha() else f"s_{slug}"
        base, count = slug, 1
        while slug in out:
            count += 1
            slug = f"{base}_{count}"
        out.append(slug)
    return out
