"""What every check works on: the domain on trial, its plugin, its trials."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from ..domains import DomainInfo, Plugins
from ..hookspecs import Domain
from ..run import Case
from ..system import Block, Equations, Rows, System
from .state import State, exact_state
from .trial import Trial

__all__ = ["Bench", "Check", "NotJudged", "Stand"]


class NotJudged(Exception):
    """There is nothing that this check could judge; its text says why."""


@dataclass(frozen=True)
class Check:
    """One check of the kit.

    Attributes
    ----------
    name : str
        Short and stable.
    words : str
        What holds when it passes.
    run : callable
        ``run(bench) -> complaints``; none when it passes.
    needs : tuple of str
        Checks that must pass first: where one fails, this one could only fail for the same reason.
    """

    name: str
    words: str
    run: Callable[[Bench], list[str]]
    needs: tuple[str, ...] = ()


@dataclass
class Stand:
    """One trial with what its case was built to."""

    trial: Trial

    @property
    def label(self) -> str:
        """Name of the conformance file, for messages."""
        return self.trial.path.name

    @cached_property
    def case(self) -> Case:
        """The case as it stands in the file."""
        return self.trial.load()

    @property
    def system(self) -> System:
        """Its system."""
        return self.case.parts.system

    @property
    def equations(self) -> Equations:
        """Its balances."""
        return self.system.equations

    @cached_property
    def state(self) -> State:
        """Its exact state."""
        return exact_state(self.trial, self.case)

    def own_rows(self) -> Iterator[Rows]:
        """Blocks of balances that the domain on trial wrote."""
        return (r for r in self.system.row_blocks if r.writer == self.trial.domain)

    def own_blocks(self) -> Iterator[Block]:
        """Blocks of variables and faults that the domain on trial declared."""
        return (b for b in self.system.blocks if b.writer == self.trial.domain)

    def own_indices(self) -> np.ndarray:
        """Indices of its balances."""
        parts = [np.arange(r.start, r.stop) for r in self.own_rows()]
        return np.concatenate(parts) if parts else np.zeros(0, dtype=np.int64)

    def near(self, rng: np.random.Generator, share: float = 0.02) -> np.ndarray:
        """A state that closes no balance: the exact one, every variable moved by up to `share`, faults present."""
        x = self.state.x.copy()
        size = np.where(np.abs(x) > 0, np.abs(x), 1.0)
        move = rng.uniform(-1.0, 1.0, x.size) * share * size
        keep = [c for c in self.case.model.fixed if self.system.block_of(c).fault is None]
        move[keep] = 0.0
        moved = x + move
        out_of_bounds = (moved < self.system.lower) | (moved > self.system.upper)
        return np.where(out_of_bounds, x - move, moved)


@dataclass
class Bench:
    """The domain on trial.

    Attributes
    ----------
    domain : type of Domain
    plugins : Plugins
        With it loaded.
    trials : tuple of Trial
    seed : int
    runs : int
        Runs without a fault for the rate of false alarms.
    """

    domain: type[Domain]
    plugins: Plugins
    trials: tuple[Trial, ...]
    seed: int = 1
    runs: int = 2000
    stands: tuple[Stand, ...] = field(init=False)

    def __post_init__(self) -> None:
        self.stands = tuple(Stand(t) for t in self.trials)

    @property
    def info(self) -> DomainInfo:
        """Where the domain came from."""
        return self.plugins.domains[self.domain.name]

    def rng(self) -> np.random.Generator:
        """A fresh generator, the same for every check."""
        return np.random.default_rng(self.seed)
