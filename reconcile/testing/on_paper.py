"""Checks that read what a domain says of itself: names, units, options, sentences, version, author."""

from __future__ import annotations

import string
import sys
from collections import Counter
from collections.abc import Iterator
from importlib.metadata import PackageNotFoundError, metadata
from typing import Any, get_args

from pydantic import BaseModel

from ..system import FaultKind
from ..units import UnitProblem, parse_unit
from .bench import Bench, Check, Stand

__all__ = ["CHECKS"]


def _signed(bench: Bench) -> list[str]:
    out = []
    if bench.domain.version in ("", "0"):
        out.append(f"{bench.domain.__name__} states no version; write version = '1.0' in the class")
    if not bench.domain.summary.strip():
        out.append(f"{bench.domain.__name__} has no summary; write one line for 'reconcile domains'")
    if not _author(bench):
        out.append("no author is stated; give the distribution authors, or the module an __author__")
    return out


def _author(bench: Bench) -> str:
    try:
        told = metadata(bench.info.distribution) if bench.info.distribution else None
    except (PackageNotFoundError, ValueError):
        told = None
    for key in ("Author", "Author-email", "Maintainer", "Maintainer-email"):
        if told is not None and told[key]:
            return str(told[key])
    return str(getattr(sys.modules.get(bench.domain.__module__), "__author__", "") or "")


def _documented(bench: Bench) -> list[str]:
    out = []
    models = (bench.domain.options, bench.domain.stream_options, bench.domain.node_options)
    for model in [m for m in models if m is not None]:
        for owner, key, description in _fields(model, set()):
            if not description:
                out.append(f"option {key!r} of {owner} has no description")
        if model.model_config.get("extra") != "forbid":
            out.append(f"{model.__name__} takes unknown keys silently; write model_config = ConfigDict(extra='forbid')")
    return out


def _fields(model: type[BaseModel], seen: set[type]) -> Iterator[tuple[str, str, str]]:
    if model in seen:
        return
    seen.add(model)
    for name, info in model.model_fields.items():
        yield model.__name__, name, (info.description or "").strip()
        for inner in _models_in(info.annotation):
            yield from _fields(inner, seen)


def _models_in(annotation: Any) -> Iterator[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        yield annotation
    for argument in get_args(annotation):
        yield from _models_in(argument)


def _named(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        for rows in stand.own_rows():
            if not rows.kind.strip():
                out.append(f"{stand.label}: balances {', '.join(rows.names[:3])} say not what they balance; give kind=")
            if rows.names == tuple(f"{rows.kind} {i + 1}" for i in range(len(rows.names))):
                out.append(f"{stand.label}: balances of {rows.kind!r} are only numbered; give names=")
            problem = _unreadable(rows.unit)
            if problem:
                out.append(f"{stand.label}: balances of {rows.kind!r} have no usable unit ({problem}); give unit=")
        every = Counter(n for r in stand.system.row_blocks for n in r.names)
        twice = [n for r in stand.own_rows() for n in r.names if every[n] > 1]
        out += [f"{stand.label}: two balances are named {n!r}" for n in dict.fromkeys(twice)]
        for block in stand.own_blocks():
            problem = _unreadable(block.unit)
            if problem:
                out.append(f"{stand.label}: variables {block.items[0]}.{block.quantity} ... have no unit ({problem})")
        out += _unwritten(stand)
    return out


def _unreadable(unit: str) -> str:
    if not unit.strip():
        return "it is empty; a plain number has the unit '1'"
    try:
        parse_unit(unit)
    except UnitProblem as problem:
        return str(problem)
    return ""


def _unwritten(stand: Stand) -> list[str]:
    """Variables that stand in no balance."""
    e = stand.equations
    used = set(e.linear.indices.tolist()) | set(e.pairs.ravel().tolist())
    for _, call in e.calls:
        for matrix in call.matrices:
            used |= set(matrix.indices.tolist())
    lost = [b.name(c) for b in stand.own_blocks() for c in range(b.start, b.stop) if c not in used]
    return [f"{stand.label}: {', '.join(lost[:3])} {'stands' if len(lost) == 1 else 'stand'} in no balance"] * bool(
        lost
    )


def _sentences(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        for block in stand.own_blocks():
            if block.fault is not None:
                out += [f"{stand.label}: fault {block.fault.kind!r} {c}" for c in _faulty_sentence(block.fault)]
    return list(dict.fromkeys(out))


def _faulty_sentence(fault: FaultKind) -> list[str]:
    out = []
    words = {"item": "HERE", "size": "12.5", "unit": "UNIT", "direction": "high"}
    for key, text in (("says", fault.says), ("separate", fault.separate)):
        if not text.strip():
            told = "what it would look like" if key == "says" else "what would confirm or exclude it"
            out.append(f"has an empty sentence; say {told} ({key}=)")
            continue
        try:
            told = text.format(**words)
        except (KeyError, IndexError, ValueError):
            known = ", ".join("{" + w + "}" for w in ("item", "size", "unit", "direction"))
            names = (
                [n for _, n, _, _ in string.Formatter().parse(text) if n] if text.count("{") == text.count("}") else []
            )
            strange = [n for n in names if n not in words]
            out.append(f"cannot fill {strange or text!r} in {key}=; there are {known}")
            continue
        if key == "says" and "HERE" not in told:
            out.append("does not name its place; write {item} in says=")
        if key == "says" and "12.5" not in told:
            out.append("does not tell its size; write {size} {unit} in says=")
    return out


CHECKS = (
    Check("signed", "version, summary and author are stated", _signed),
    Check("documented", "every option is described, and unknown ones are refused", _documented),
    Check("named", "every balance and variable has a name and a unit", _named),
    Check("sentences", "every possible fault has its sentences", _sentences),
)
