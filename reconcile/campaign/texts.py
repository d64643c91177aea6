"""Single values of a case's plan for its log: quantities, durations, tags, conditions; each mistake at its place."""

from __future__ import annotations

import re
from collections.abc import Mapping
from typing import Any

from ..case.places import Places
from ..case.quantities import Refusal, read_quantity
from ..case.spec import MeterSpec
from ..case.validate import validated
from ..errors import Problems, did_you_mean
from ..units import UnitProblem, describe_kind, difference_factor, factor_offset
from .spec import Condition

__all__ = ["Path", "Texts"]

Path = tuple[Any, ...]
_CONDITION = re.compile(r"\s*(?P<column>[^<>=]+?)\s*(?:(?P<sign>[<>=])\s*(?P<value>[^<>=]+?)\s*)?")


class Texts:
    """Reads single values; what is wrong goes to the problems, and None comes back.

    Attributes
    ----------
    meters : mapping of tag to MeterSpec
        Those that were read.
    tags, streams : tuple of str
        All names that the case gives, those with mistakes included.
    places : Places
    problems : Problems
    """

    def __init__(
        self,
        meters: Mapping[str, MeterSpec],
        tags: tuple[str, ...],
        streams: tuple[str, ...],
        places: Places,
        problems: Problems,
    ) -> None:
        self.meters, self.tags, self.streams, self.places, self.problems = meters, tags, streams, places, problems

    def block(self, model: Any, value: Any, path: Path, owner: str) -> Any:
        """Return a block that has passed its model."""
        return validated(model, value, path=path, owner=owner, places=self.places, problems=self.problems)

    def refuse(self, path: Path, code: str, message: str, hint: str = "", *, key: bool = False) -> None:
        """Record a mistake."""
        self.problems.add(code, message, hint, self.places.where(path, key=key))

    # ---------------------------------------------------------------- single values

    def quantity(self, path: Path, value: Any, owner: str, example: str) -> tuple[float, str] | None:
        """Return a positive value with its unit; None after a complaint."""
        try:
            number, unit = read_quantity(self.places.text(path, value), owner, example)
        except Refusal as refused:
            self.problems.extend([refused.at(self.places.where(path))])
            return None
        if not number > 0:
            self.refuse(path, "not-positive", f"{owner} is {number:g}", f"write e.g. {example}")
            return None
        return number, unit

    def difference(self, path: Path, value: Any, unit: str, owner: str) -> float | None:
        """Return a positive difference in the unit wanted; a bare number is in that unit only if it has none."""
        if value is None:
            return None
        found = self.quantity(path, value, owner, f"2 {unit}")
        if found is None:
            return None
        try:
            return found[0] * difference_factor(found[1], unit)
        except UnitProblem:
            kind = describe_kind(found[1]) or "a plain number"
            self.refuse(path, "unit-mismatch", f"{owner} is in {found[1] or 'no unit'} ({kind})", f"write it in {unit}")
            return None

    def duration(
        self, path: Path, value: Any, owner: str, example: str = "20 min", *, zero: bool = False
    ) -> float | None:
        """Return seconds."""
        if value is None:
            return None
        if zero and str(value).split(" ")[0] in ("0", "0.0"):
            return 0.0
        found = self.quantity(path, value, owner, example)
        if found is None:
            return None
        try:
            return found[0] * difference_factor(found[1], "s")
        except UnitProblem:
            self.refuse(path, "not-a-duration", f"{owner} is {value!r}, which is no time", f"write e.g. {example}")
            return None

    def known_tag(self, path: Path, tag: str, owner: str) -> None:
        """Refuse a tag that is no meter."""
        if tag not in self.tags:
            hint = did_you_mean(tag, self.tags) or "name a meter of the case"
            self.refuse(path, "unknown-meter", f"{owner} names {tag!r}, which is no meter", hint)

    def condition(self, path: Path, text: Any, owner: str) -> Condition | None:
        """Read what a column must be; a number into the unit of its column."""
        match = _CONDITION.fullmatch(str(text))
        if not match:
            hint = "write a column of flags, 'F > 2 kg/h', or 'valve = shut'"
            self.refuse(path, "condition-unreadable", f"{owner} {text!r} is not understood", hint)
            return None
        column, sign, value = match["column"], match["sign"] or "", match["value"] or ""
        if sign in (">", "<"):
            unit = self._column_unit(column)
            try:
                number, stated = read_quantity(value, owner, f"2 {unit}".strip())
                if column in self.meters:
                    factor, offset = factor_offset(stated, unit)
                    number = factor * number + offset
                elif stated:
                    raise Refusal("unit-mismatch", f"{owner} compares {column!r}, which is no meter, with {value!r}",
                                  "write a plain number")  # fmt: skip
            except Refusal as refused:
                self.problems.extend([refused.at(self.places.where(path))])
                return None
            except UnitProblem as problem:
                self.refuse(path, problem.code, f"{owner}: {problem.message}", f"write it in {unit}")
                return None
            value = repr(number)
        return Condition(column, sign, value)  # type: ignore[arg-type]

    def _column_unit(self, tag: str) -> str:
        meter = self.meters.get(tag)
        if meter is None:
            return ""
        level = (meter.options.get("reading") or {}).get("level")
        return str(level.get("unit", "")) if level else meter.unit
