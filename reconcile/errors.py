"""Errors that tell a user where something is wrong and what to write instead.

One base class. Input problems are collected and raised together, so that a file with five mistakes
gets five messages. Every error survives pickling, since work may be done in other processes.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Any

__all__ = [
    "InputError",
    "Location",
    "MissingExtra",
    "Notice",
    "PluginError",
    "Problem",
    "Problems",
    "ReconcileError",
    "SolveError",
    "did_you_mean",
]


@dataclass(frozen=True)
class Location:
    """A place in the user's input; whatever is unknown stays None.

    Attributes
    ----------
    file : str, optional
        File name as the user gave it.
    line, column : int, optional
        Counted from 1.
    row : int, optional
        Data row of a table, counted from 1 without the header.
    tag : str, optional
        Meter tag, stream, node or column name concerned.
    """

    file: str | None = None
    line: int | None = None
    column: int | None = None
    row: int | None = None
    tag: str | None = None

    def __str__(self) -> str:
        parts = [self.file or ""]
        if self.line is not None:
            parts.append(str(self.line))
            if self.column is not None:
                parts.append(str(self.column))
        text = ":".join(p for p in parts if p)
        if self.row is not None:
            text += f"{' ' if text else ''}row {self.row}"
        return text


@dataclass(frozen=True)
class Problem:
    """One thing that is wrong with the input.

    Attributes
    ----------
    code : str
        Stable code, e.g. ``percent-of-what``; safe to search for and to translate by.
    message : str
        What is wrong, with the offending text.
    hint : str
        What to write instead; may be empty.
    where : Location
        Place of the mistake.
    """

    code: str
    message: str
    hint: str = ""
    where: Location = Location()

    def __str__(self) -> str:
        place = str(self.where)
        text = f"{place}: {self.message}" if place else self.message
        if self.hint:
            text += f"; {self.hint}" if not text.endswith((".", "?", "!")) else f" {self.hint}"
        return f"{text} [{self.code}]"


@dataclass(frozen=True)
class Notice:
    """Something that does not stop a run, but belongs in the report.

    Attributes
    ----------
    code : str
        Stable code.
    message : str
        One or two plain sentences.
    where : Location
        Place in the input, if there is one.
    """

    code: str
    message: str
    where: Location = Location()

    def __str__(self) -> str:
        place = str(self.where)
        return f"{place}: {self.message} [{self.code}]" if place else f"{self.message} [{self.code}]"


class ReconcileError(Exception):
    """Base of every error that the program raises on purpose.

    Parameters
    ----------
    message : str
        What went wrong, in words for the user.
    code : str
        Stable code.
    hint : str
        What to do about it.
    """

    exit_code = 3
    default_code = "error"

    def __init__(self, message: str, *, code: str | None = None, hint: str = "") -> None:
        super().__init__(message)
        self.message = message
        self.code = code or self.default_code
        self.hint = hint

    def __str__(self) -> str:
        text = self.message if not self.hint else f"{self.message}; {self.hint}"
        return f"{text} [{self.code}]"

    def __reduce__(self) -> tuple[Any, ...]:
        return _rebuild, (type(self), self.__dict__.copy(), self.args)


def _rebuild(kind: type[ReconcileError], state: dict[str, Any], args: tuple[Any, ...]) -> ReconcileError:
    error = kind.__new__(kind)
    Exception.__init__(error, *args)
    error.__dict__.update(state)
    return error


class InputError(ReconcileError, ValueError):
    """The input is wrong: all its problems at once, in file order."""

    exit_code = 2
    default_code = "input"

    def __init__(self, problems: Sequence[Problem] | Problem) -> None:
        found = (problems,) if isinstance(problems, Problem) else tuple(problems)
        super().__init__("\n".join(str(p) for p in found), code=found[0].code if found else "input")
        self.problems: tuple[Problem, ...] = found

    def __str__(self) -> str:
        return self.message


class SolveError(ReconcileError):
    """The readings were understood, but no consistent answer was found; nothing is exported."""

    exit_code = 3
    default_code = "not-solved"


class PluginError(ReconcileError):
    """A plugin failed; the message names it.

    Attributes
    ----------
    plugin : str
        Name of the plugin.
    """

    exit_code = 4
    default_code = "plugin-failed"

    def __init__(self, plugin: str, message: str, *, code: str | None = None, hint: str = "") -> None:
        super().__init__(f"plugin {plugin!r}: {message}", code=code, hint=hint)
        self.plugin = plugin


class MissingExtra(ReconcileError, ImportError):
    """An optional library is not installed; the message names the extra that brings it."""

    exit_code = 2
    default_code = "missing-extra"

    def __init__(self, library: str, extra: str, purpose: str) -> None:
        super().__init__(
            f"{purpose} needs {library}, which is not installed",
            hint=f"install it with: pip install 'reconcile-flows[{extra}]'",
        )


class Problems:
    """Collects problems while a file is read, and raises them together."""

    def __init__(self, file: str | None = None) -> None:
        self.file = file
        self.found: list[Problem] = []

    def add(self, code: str, message: str, hint: str = "", where: Location | None = None) -> None:
        """Record one problem; a location without a file gets the collector's file."""
        place = where or Location()
        if place.file is None:
            place = replace(place, file=self.file)
        problem = Problem(code, message, hint, place)
        if problem not in self.found:
            self.found.append(problem)

    def extend(self, problems: Iterable[Problem]) -> None:
        """Record several problems."""
        for problem in problems:
            self.add(problem.code, problem.message, problem.hint, problem.where)

    def __bool__(self) -> bool:
        return bool(self.found)

    def raise_if_any(self) -> None:
        """Raise one `InputError` with all problems in file order, if there are any."""
        if self.found:
            raise InputError(
                sorted(
                    self.found,
                    key=lambda p: (
                        p.where.file or "",
                        p.where.line or 0,
                        p.where.row or 0,
                        p.where.column or 0,
                    ),
                )
            )


def did_you_mean(name: str, known: Iterable[str]) -> str:
    """Return ``did you mean 'x'?`` for the nearest known name, or an empty string."""
    names = [str(k) for k in known]
    near = difflib.get_close_matches(name, names, n=1, cutoff=0.6)
    if not near:
        folded = {k.casefold(): k for k in names}
        near = [folded[name.casefold()]] if name.casefold() in folded else []
    return f"did you mean {near[0]!r}?" if near else ""
