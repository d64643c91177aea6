"""Published cases: one YAML file each, and the way from it to an adjusted snapshot.

A file states where its numbers come from (``provenance`` says what was read and what is from memory), what the source
prints with the number of digits it prints (``printed``), and what other programs calculated to ten digits
(``computed``). Printed figures are compared to half a unit of their last digit.
"""

from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import yaml

from reconcile.adjust.solve import Problem, Solution, solve
from reconcile.network import OUTSIDE, Network
from reconcile.system import System

CASES = Path(__file__).parent / "cases"
COMPUTED = 6e-10
"""Computed figures are stated to ten decimals by programs that agree to a few units of the last."""


def load(name: str) -> dict[str, Any]:
    return yaml.safe_load((CASES / f"{name}.yaml").read_text(encoding="utf-8"))


def adjust_system(system: System, readings: dict[str, tuple[float, float]]) -> Solution:
    """Adjust readings ``variable: (value, sigma)`` under the balances of a system, all else unmeasured."""
    columns = np.array([system.column(n) for n in readings])
    value, sigma = np.array(list(readings.values()), dtype=float).T
    fixed = np.array(sorted(system.fixed), dtype=np.int64)
    start = system.starts.copy()
    start[fixed] = [system.fixed[int(c)] for c in fixed]
    problem = Problem(
        equations=lambda _: system.equations,
        sigma=lambda _: sigma,
        columns=columns,
        readings=value,
        fixed=fixed,
        start=start,
        value_dependent=False,
        settle=False,
        lower=system.lower,
        upper=system.upper,
    )
    return solve(problem, names=system.name, row_names=lambda r: system.row_names()[r])


@dataclass(frozen=True)
class Adjusted:
    """A published linear case, adjusted by this program."""

    raw: dict[str, Any]
    names: list[str]
    nodes: list[str]
    system: System
    readings: dict[str, tuple[float, float]]
    solution: Solution

    @cached_property
    def known(self) -> np.ndarray:
        """Which of `names` are determined."""
        s = self.solution
        out = np.ones(len(self.names), dtype=bool)
        out[s.free] = s.adjuster.observable
        return out

    @cached_property
    def cover(self) -> np.ndarray:
        s = self.solution
        out = np.zeros((len(self.names), s.adjuster.cover.shape[1]))
        out[[self.names.index(n) for n in self.readings]] = s.adjuster.cover
        out[s.free] = s.adjuster.cover_unmeasured
        return out

    @property
    def covariance(self) -> np.ndarray:
        return self.cover @ self.cover.T

    @property
    def measured(self) -> np.ndarray:
        return np.array([self.names.index(n) for n in self.readings])

    @property
    def value(self) -> np.ndarray:
        return np.array([v for v, _ in self.readings.values()])

    @property
    def sigma(self) -> np.ndarray:
        return np.array([s for _, s in self.readings.values()])

    @property
    def objective(self) -> float:
        return float(self.solution.parity @ self.solution.parity)

    @property
    def closure(self) -> np.ndarray:
        """Of the raw readings; everything must be measured."""
        x = self.solution.x.copy()
        x[self.measured] = self.value
        return self.solution.equations.closure(x)

    @property
    def covariance_of_closure(self) -> np.ndarray:
        a = self.solution.jacobian[:, self.measured]
        return (a * self.sigma**2) @ a.T


def sigma_of(stated: float | str) -> float:
    """``sqrt V`` where the source states a variance."""
    return float(np.sqrt(float(stated.removeprefix("sqrt ")))) if isinstance(stated, str) else float(stated)


def network_of(raw: dict[str, Any]) -> Network:
    return Network.from_paths({name: tuple(path.split(" -> ")) for name, path in raw["network"].items()})


def adjusted(name: str) -> Adjusted:
    """Adjust a case with a network of flows, or with balances given as rows."""
    raw = load(name)
    readings = {n: (v, sigma_of(s)) for n, (v, s) in raw["readings"].items()}
    system = System()
    if "network" in raw:
        network = network_of(raw)
        names, nodes = list(network.streams), list(network.nodes)
        flow = system.variables("value", names, unit="")
        system.require(network.incidence @ flow == 0, names=nodes, kind="mass")
    else:
        b = raw["balances"]
        names, nodes = b["variables"], list(b["rows"])
        value = system.variables("value", names, unit="")
        system.require(np.array(list(b["rows"].values())) @ value == np.array(b["rhs"]), names=nodes, kind="condition")
    assert OUTSIDE not in nodes
    solution = adjust_system(system, {f"{n}.value": r for n, r in readings.items()})
    return Adjusted(raw, names, nodes, system, readings, solution)


def matches_print(got: float, printed: float, digits: int) -> bool:
    """Whether a figure is within half a unit of the last printed digit."""
    return abs(got - printed) <= 0.5 * 10.0**-digits * (1 + 1e-9)
