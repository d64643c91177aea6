"""Checks every variable that a case names against those that its domains declared."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Any

from ..errors import Location, Problem, Problems, did_you_mean
from ..units import UnitProblem, describe_kind, mismatch_hint, parse_unit, same_kind
from .reads import names_in
from .spec import CaseSpec

__all__ = ["check_references"]


def check_references(
    spec: CaseSpec,
    variables: Mapping[str, str],
    problems: Problems,
    missing: Callable[[str], str | None] = lambda name: None,
) -> None:
    """Check names and units of meters, known, bounds, design and figures.

    Parameters
    ----------
    spec : CaseSpec
    variables : mapping of variable name to unit
        All variables of the system, faults left out.
    problems : Problems
        Takes every mistake at its place in the case.
    missing : callable
        ``missing(name) -> sentence or None``: what the domains say of a variable that is not there.
    """
    checker = _Checker(spec, variables, problems, missing)
    for tag, meter in spec.meters.items():
        for name, _ in meter.reads:
            checker.variable(name, meter.unit, ("meters", tag, "reads"), ("meters", tag, "unit"), f"meter {tag!r}")
    for name, known in spec.known.items():
        spot = checker.path("known", name)
        checker.variable(name, known.unit, spot, (*spot, "value"), f"known {name!r}", key=True)
    for name, bound in spec.bounds.items():
        spot = checker.path("bounds", name)
        for limit in (bound.lower, bound.upper):
            if limit is not None:
                checker.variable(name, limit[1], spot, spot, f"bound of {name!r}", key=True)
    for name, (_, unit) in spec.design.items():
        spot = checker.path("design", name)
        checker.variable(name, unit, spot, spot, f"design of {name!r}", key=True)
    for figure, formula in spec.figures.items():
        for name in names_in(formula):
            checker.exists(name, ("figures", figure), f"figure {figure!r}")


class _Checker:
    def __init__(
        self, spec: CaseSpec, variables: Mapping[str, str], problems: Problems, missing: Callable[[str], str | None]
    ) -> None:
        self.spec, self.variables, self.problems, self.missing = spec, variables, problems, missing
        self.quantities: dict[str, list[str]] | None = None
        self.unreadable: set[str] = set()

    def path(self, section: str, name: str) -> tuple[Any, ...]:
        """Path of an entry whose key may stand in backticks."""
        odd = (section, f"`{name}`")
        found: Location = self.spec.where(odd, key=True)
        plain: Location = self.spec.where((section, name), key=True)
        around: Location = self.spec.where((section,), key=True)
        is_odd = (found.line, found.column) != (around.line, around.column)
        is_plain = (plain.line, plain.column) != (around.line, around.column)
        return odd if is_odd and not is_plain else (section, name)

    def exists(self, name: str, spot: tuple[Any, ...], owner: str, *, key: bool = False) -> bool:
        """Whether there is such a variable; otherwise a problem is noted."""
        if name in self.variables:
            return True
        hint = self.missing(name) or self._glued(name) or self._nearest(name) or self._some()
        self.problems.extend(
            [
                Problem(
                    "unknown-variable", f"{owner}: there is no variable {name!r}", hint, self.spec.where(spot, key=key)
                )
            ]
        )
        return False

    def variable(
        self, name: str, unit: str, spot: tuple[Any, ...], unit_spot: tuple[Any, ...], owner: str, *, key: bool = False
    ) -> None:
        """Check that a variable is there and that a unit fits it."""
        if not self.exists(name, spot, owner, key=key):
            return
        wanted = self.variables[name]
        if not self._readable(wanted, name) or same_kind(unit, wanted):
            return
        self.problems.extend(
            [
                Problem(
                    "unit-mismatch",
                    f"{owner} is in {unit or 'no unit'}{_words(unit)}, "
                    f"but {name} is in {wanted or 'no unit'}{_words(wanted)}",
                    mismatch_hint(unit, wanted),
                    self.spec.where(unit_spot),
                )
            ]
        )

    def _readable(self, unit: str, name: str) -> bool:
        """Whether the unit that a domain gave can be read; told once, where the user wrote it if that is found."""
        if unit in self.unreadable:
            return False
        try:
            parse_unit(unit)
        except UnitProblem as problem:
            self.unreadable.add(unit)
            self.problems.extend(
                [Problem(problem.code, f"variable {name}: {problem.message}", problem.hint, self._written(unit))]
            )
            return False
        return True

    def _written(self, unit: str) -> Location:
        for domain, options in self.spec.domains.items():
            for option, value in options.items() if isinstance(options, dict) else ():
                if value == unit:
                    return self.spec.where(("domains", domain, option))
        return self.spec.where(("domains",), key=True)

    def _by_item(self) -> dict[str, list[str]]:
        if self.quantities is None:
            self.quantities = {}
            for name in self.variables:
                item, _, quantity = name.partition(".")
                self.quantities.setdefault(item, []).append(quantity)
        return self.quantities

    def _nearest(self, name: str) -> str:
        """Look for the item first, then for the quantity: quick among a hundred thousand variables."""
        items = self._by_item()
        item, _, quantity = name.partition(".")
        if item in items:
            near = did_you_mean(quantity, items[item])
            if near:
                return near.replace("mean '", f"mean '{item}.")
            return f"{item} has: {', '.join(items[item][:8])}"
        if len(items) > 20_000:
            return ""
        near = did_you_mean(item, [i for i, q in items.items() if quantity in q]) or did_you_mean(item, items)
        return near.replace("'?", f".{quantity}'?") if near else ""

    def _glued(self, name: str) -> str:
        if "-" in name and any(part in self.variables for part in name.split("-")):
            return "a minus needs a space before and behind it, since names may hold one"
        return ""

    def _some(self) -> str:
        if not self.variables:
            return "the domains of this case declare no variables"
        some = ", ".join(list(self.variables)[:6])
        return f"there are {len(self.variables)} variables, such as {some}"


def _words(unit: str) -> str:
    words = describe_kind(unit)
    return f" ({words})" if words else ""
