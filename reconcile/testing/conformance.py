"""Runs all checks on one domain, and tells the outcome in words."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path
from types import ModuleType
from typing import Literal

from ..domains import Plugins, load_plugins
from ..errors import InputError, Problem, ReconcileError
from ..hookspecs import Domain
from . import building, of_balances, of_results, on_paper
from .bench import Bench, Check, NotJudged
from .trial import host, read_trial

__all__ = ["CHECKS", "Conformance", "Finding", "check_domain", "conformance_of_files", "prepare"]

Outcome = Literal["passes", "fails", "not judged"]

CHECKS: tuple[Check, ...] = (*on_paper.CHECKS, *building.CHECKS, *of_balances.CHECKS, *of_results.CHECKS)
_BY_NAME = {c.name: c for c in CHECKS}


@dataclass(frozen=True)
class Finding:
    """Outcome of one check.

    Attributes
    ----------
    name : str
    words : str
        What holds when it passes.
    outcome : str
        ``passes``, ``fails`` or ``not judged``.
    messages : tuple of str
        What is wrong, or why it was not judged.
    """

    name: str
    words: str
    outcome: Outcome
    messages: tuple[str, ...] = ()

    def __str__(self) -> str:
        told = "".join(f"\n{'':13}{m}" for m in self.messages)
        return f"{self.outcome:11}  {self.words}{told}"


@dataclass
class Conformance:
    """All checks of one domain; each is run when it is first asked for.

    Attributes
    ----------
    bench : Bench
    """

    bench: Bench
    _found: dict[str, Finding] = field(default_factory=dict)

    def finding(self, name: str) -> Finding:
        """Outcome of a check by its name."""
        if name not in self._found:
            self._found[name] = self._judge(_BY_NAME[name])
        return self._found[name]

    def _judge(self, check: Check) -> Finding:
        broken = [n for n in check.needs if self.finding(n).outcome != "passes"]
        if broken:
            first = self.finding(broken[0])
            return Finding(check.name, check.words, "not judged", (f"first must hold: {first.words}",))
        try:
            complaints = check.run(self.bench)
        except NotJudged as nothing:
            return Finding(check.name, check.words, "not judged", (str(nothing),))
        except ReconcileError as error:
            complaints = [str(error)]
        return Finding(check.name, check.words, "fails" if complaints else "passes", tuple(complaints))

    @property
    def findings(self) -> tuple[Finding, ...]:
        """Outcome of every check, in the order of the kit."""
        return tuple(self.finding(c.name) for c in CHECKS)

    @property
    def failed(self) -> tuple[str, ...]:
        """Names of the checks that fail."""
        return tuple(f.name for f in self.findings if f.outcome == "fails")

    @property
    def ok(self) -> bool:
        """Whether no check fails."""
        return not self.failed

    def __str__(self) -> str:
        counts = [sum(f.outcome == o for f in self.findings) for o in ("passes", "fails", "not judged")]
        head = f"Domain {self.bench.domain.name!r}: {counts[0]} checks pass, {counts[1]} fail, {counts[2]} not judged"
        return "\n".join([head, "", *(str(f) for f in self.findings)])


def check_domain(
    domain: type[Domain],
    trials: Sequence[str | Path],
    *,
    plugin: ModuleType | None = None,
    seed: int = 1,
    runs: int = 2000,
) -> Conformance:
    """Put a domain on trial.

    Parameters
    ----------
    domain : type of Domain
    trials : sequence of path
        Conformance files, see `reconcile.testing.trial`.
    plugin : module, optional
        The plugin that offers the domain, where it is not installed.
    seed : int
        Of all random numbers.
    runs : int
        Runs without a fault for the rate of false alarms.

    Returns
    -------
    Conformance
        Checks run when they are asked for; ``print`` it for the table, ``failed`` names the checks that fail.

    Raises
    ------
    InputError
        If a conformance file or its case cannot be read.
    PluginError
        If the domain cannot be loaded or fails to write its balances.
    """
    return Conformance(prepare(domain, trials, plugin=plugin, seed=seed, runs=runs))


def prepare(
    domain: type[Domain],
    trials: Sequence[str | Path],
    *,
    plugin: ModuleType | None = None,
    seed: int = 1,
    runs: int = 2000,
) -> Bench:
    """Load a domain and its trials; see `check_domain`."""
    return _bench(domain, trials, host(domain, plugin), seed, runs)


def conformance_of_files(
    trials: Sequence[str | Path], plugins: Sequence[str | Path] = (), *, seed: int = 1, runs: int = 2000
) -> Conformance:
    """Put the domain that conformance files name on trial; `plugins` are files to load beside the installed ones."""
    loaded = load_plugins(plugins)
    name = read_trial(trials[0], loaded).domain
    return Conformance(_bench(type(loaded.domain(name)), trials, loaded, seed, runs))


def _bench(domain: type[Domain], trials: Sequence[str | Path], plugins: Plugins, seed: int, runs: int) -> Bench:
    read = tuple(read_trial(t, plugins) for t in trials)
    if not read:
        raise InputError(Problem("no-trial", "a domain is put on trial with at least one conformance file"))
    for trial in read:
        if trial.domain != domain.name:
            raise InputError(
                Problem("other-domain", f"{trial.path} puts {trial.domain!r} on trial, not {domain.name!r}")
            )
    bench = Bench(domain, plugins, read, seed, runs)
    for stand in bench.stands:
        if not any(True for _ in stand.own_rows()):
            raise InputError(
                Problem(
                    "nothing-on-trial",
                    f"{stand.trial.path}: domain {domain.name!r} writes no balance in this case",
                    "name it under domains: and give it something to balance",
                )
            )
    return bench
