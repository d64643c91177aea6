"""Reads YAML as version 1.2 has it (core schema), with the place of every value.

The YAML library reads by the rules of version 1.1, under which nitric oxide (``NO``) is false, ``12:30`` is 750,
``010`` is 8 and ``1e-3`` a text; and it drops the first of two equal keys. Here only its parser is used.
"""

from __future__ import annotations

import re
from pathlib import Path as FilePath
from typing import Any, cast

import yaml

from ..errors import InputError, Location, Problem, Problems
from .places import Path, Places

__all__ = ["read_yaml"]

# A file of this many values is either not meant or a trap made of aliases.
MOST_VALUES = 5_000_000
DEEPEST = 60
_PREFIX = "tag:yaml.org,2002:"
_CORE = (
    ("null", r"~|null|Null|NULL|", ["~", "n", "N", ""]),
    ("bool", r"true|True|TRUE|false|False|FALSE", list("tTfF")),
    ("int", r"[-+]?[0-9]+|0o[0-7]+|0x[0-9a-fA-F]+", list("-+0123456789")),
    (
        "float",
        r"[-+]?(?:\.[0-9]+|[0-9]+(?:\.[0-9]*)?)(?:[eE][-+]?[0-9]+)?|[-+]?\.(?:inf|Inf|INF)|\.(?:nan|NaN|NAN)",
        list("-+0123456789."),
    ),
)

_KINDS = frozenset(name for name, _, _ in _CORE)
_Base: Any = getattr(yaml, "CSafeLoader", yaml.SafeLoader)


class _CoreLoader(_Base):
    """Parser with the scalar rules of YAML 1.2; libyaml's where it is there, four times as fast."""

    yaml_implicit_resolvers: dict[str, list[Any]] = {}  # noqa: RUF012 - the library's own way to say it


for _name, _pattern, _first in _CORE:
    _CoreLoader.add_implicit_resolver(_PREFIX + _name, re.compile(f"(?:{_pattern})$"), _first)


def read_yaml(path: str | FilePath, problems: Problems | None = None) -> tuple[Any, Places]:
    """Read one YAML file.

    Parameters
    ----------
    path : path
        UTF-8.
    problems : Problems, optional
        Collects what does not stop the reading (duplicate keys, unknown tags); without it, these raise as well.

    Returns
    -------
    data
        Plain dicts with text keys, lists, str, int, float, bool and None.
    places : Places

    Raises
    ------
    InputError
        With line and column, if the file is missing, empty, not UTF-8 or no YAML.
    """
    name = str(path)
    text = _read_text(name)
    collected = problems if problems is not None else Problems(name)
    try:
        node = yaml.compose(text, Loader=_CoreLoader)
    except yaml.MarkedYAMLError as error:
        raise InputError(_explain(name, text, error)) from None
    except yaml.reader.ReaderError as error:
        raise InputError(_unprintable(name, text, error)) from None
    except RecursionError:
        raise InputError(_too_deep(Location(name))) from None
    if node is None:
        raise InputError(
            Problem(
                "file-empty",
                "the file is empty",
                "start with 'reconcile: 1', then domains, streams and meters",
                Location(name, 1, 1),
            )
        )
    builder = _Builder(name, collected)
    data = builder.build(node, (), 0)
    if problems is None:
        collected.raise_if_any()
    return data, builder.places


def _read_text(name: str) -> str:
    try:
        raw = FilePath(name).read_bytes()
    except FileNotFoundError:
        raise InputError(
            Problem("file-missing", "there is no such file", "check the name and the folder", Location(name))
        ) from None
    except IsADirectoryError:
        raise InputError(
            Problem("file-missing", "this is a folder", "name the case file in it", Location(name))
        ) from None
    except OSError as error:
        raise InputError(
            Problem("file-unreadable", f"the file cannot be read ({error.strerror})", where=Location(name))
        ) from None
    try:
        return raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        before = raw[: error.start]
        line = before.count(b"\n") + 1
        column = len(before.rsplit(b"\n", 1)[-1].decode("utf-8", "replace")) + 1
        raise InputError(
            Problem(
                "not-utf8",
                f"byte {raw[error.start]:#04x} is not UTF-8 text",
                "save the file with encoding UTF-8",
                Location(name, line, column),
            )
        ) from None


class _Builder:
    """Turns YAML nodes into plain data and notes every place."""

    def __init__(self, file: str, problems: Problems) -> None:
        self.file = file
        self.problems = problems
        self.places = Places(file)
        self.count = 0
        self.open: set[int] = set()

    def build(self, node: yaml.Node, path: Path, depth: int) -> Any:
        """Return the data of a node."""
        place = _place(node.start_mark)
        self.places.values[path] = place
        self.count += 1
        here = Location(self.file, *place)
        if self.count > MOST_VALUES:
            raise InputError(Problem("too-many-values", "the file unfolds to millions of values", where=here))
        if depth > DEEPEST:
            raise InputError(_too_deep(here))
        if isinstance(node, yaml.ScalarNode):
            return self._scalar(node, path, here)
        if id(node) in self.open:
            self.problems.add("alias-of-itself", "this block contains itself", "write out what was meant", here)
            return None
        self.open.add(id(node))
        try:
            if isinstance(node, yaml.SequenceNode):
                return [self.build(n, (*path, i), depth + 1) for i, n in enumerate(node.value)]
            return self._mapping(cast(yaml.MappingNode, node), path, depth)
        finally:
            self.open.discard(id(node))

    def _mapping(self, node: yaml.MappingNode, path: Path, depth: int) -> dict[str, Any]:
        data: dict[str, Any] = {}
        for key_node, value_node in node.value:
            line, column = _place(key_node.start_mark)
            where = Location(self.file, line, column)
            if not isinstance(key_node, yaml.ScalarNode):
                self.problems.add(
                    "key-no-text",
                    "a list or a block cannot be a key",
                    "write a name, a colon and a value; put text with braces or brackets in quotes",
                    where,
                )
                continue
            # Keys are names: a meter called 010 or NO keeps its spelling.
            key = str(key_node.value)
            inner = (*path, key)
            if key in data:
                first = self.places.keys[inner]
                self.problems.add(
                    "duplicate-key",
                    f"{key!r} stands here and in line {first[0]}, column {first[1]}",
                    "rename or remove one of the two",
                    where,
                )
                continue
            if key == "<<":
                self.problems.add("merge-key", "'<<' does not merge blocks in YAML 1.2", "repeat the keys", where)
                continue
            self.places.keys[inner] = (line, column)
            data[key] = self.build(value_node, inner, depth + 1)
        return data

    def _scalar(self, node: yaml.ScalarNode, path: Path, here: Location) -> Any:
        text = str(node.value)
        kind = node.tag.removeprefix(_PREFIX)
        if kind == "str" or kind not in _KINDS:
            if kind != "str":
                self.problems.add("unknown-tag", f"the tag {node.tag!r} has no meaning here", "leave it out", here)
            return text
        self.places.texts[path] = text
        if kind == "null":
            return None
        if kind == "bool":
            return text.lower() == "true"
        try:
            if kind == "int":
                return int(text, {"0o": 8, "0x": 16}.get(text[:2], 10))
            return float(text.lower().replace(".inf", "inf").replace(".nan", "nan"))
        except ValueError:
            self.problems.add("number-unreadable", f"{text!r} is no number", "leave the tag out", here)
            return text


def _place(mark: yaml.Mark) -> tuple[int, int]:
    return mark.line + 1, mark.column + 1


def _too_deep(where: Location) -> Problem:
    return Problem("too-deep", "blocks are nested too deeply", "a case needs about four levels", where)


def _unprintable(name: str, text: str, error: yaml.reader.ReaderError) -> Problem:
    found = re.search(r"[^\t\n\r\x20-\x7e\x85\xa0-\ud7ff\ue000-\ufffd\U00010000-\U0010ffff]", text)
    spot = found.start() if found else 0
    line = text.count("\n", 0, spot) + 1
    column = spot - (text.rfind("\n", 0, spot) + 1) + 1
    what = f"character {ord(text[spot]):#04x}" if found else str(error.reason)
    return Problem("control-character", f"{what} is not allowed in YAML", "remove it", Location(name, line, column))


def _explain(name: str, text: str, error: yaml.MarkedYAMLError) -> Problem:
    """Say in words of a user what the parser stumbled over, and where that began."""
    mark = error.problem_mark or error.context_mark
    line, column = _place(mark) if mark else (1, 1)
    lines = text.splitlines()
    context, problem = error.context or "", error.problem or "not readable"
    began = error.context_mark

    def at(code: str, message: str, hint: str, spot: tuple[int, int] = (line, column)) -> Problem:
        return Problem(code, message, hint, Location(name, *spot))

    if "quoted scalar" in context and began is not None:
        return at(
            "quote-unclosed",
            "a quotation mark opens here and the text does not end well",
            "close it on the same line; in double quotes write \\\\ for a backslash",
            _place(began),
        )
    for number in (line, line - 1):
        if 0 < number <= len(lines):
            indent = re.match(r" *\t", lines[number - 1])
            if indent:
                return at("tab-indent", "a tab indents this line", "indent with spaces", (number, indent.end()))
    if "cannot start any token" in problem:
        sign = lines[line - 1][column - 1 : column] if line <= len(lines) else ""
        return at("needs-quotes", f"a value cannot start with {sign!r}", "put the whole value in quotes")
    if "mapping values are not allowed" in problem:
        return at(
            "colon-unexpected",
            "a colon is not expected here",
            "put text with ': ' in quotes, or begin the key on its own line with the right indentation",
        )
    if "unexpected ':'" in problem:
        return at("colon-unexpected", "a colon is not expected here", "put a space behind the colon of a key")
    if "undefined alias" in problem:
        return at("alias-unknown", f"{problem}", "define it with & before it is used, or put the text in quotes")
    if "nesting depth" in problem:
        return _too_deep(Location(name, line, column))
    if "single document" in context + problem:
        return at("two-documents", "a second document starts here ('---')", "keep one case in one file")
    if "flow sequence" in context or "flow mapping" in context:
        spot = _place(began) if began is not None else (line, column)
        return at(
            "bracket-unclosed",
            "the bracket or brace opened here is not closed, "
            f"or a comma is missing before line {line}, column {column}",
            "close it, and part the entries by commas",
            spot,
        )
    return at(
        "not-yaml",
        f"this is not readable as YAML ({problem})",
        "check the indentation and the colon of this line and the one before",
    )
