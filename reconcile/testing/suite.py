"""The kit as tests: a class with two attributes, collected by pytest."""

from __future__ import annotations

import inspect
from collections.abc import Sequence
from pathlib import Path
from types import ModuleType
from typing import Any, ClassVar

from ..hookspecs import Domain
from .conformance import CHECKS, Conformance, check_domain

__all__ = ["DomainSuite"]


class DomainSuite:
    """Base of a test class that puts a domain on trial, one test a check.

    Attributes
    ----------
    domain : type of Domain
        The domain.
    trials : sequence of str
        Conformance files, relative to the test file; patterns such as ``trials/*.yaml`` are filled in.
    plugin : module, optional
        The plugin that offers the domain, where it is not installed.
    seed, runs : int
        See `check_domain`.

    Examples
    --------
    >>> class TestCounts(DomainSuite):
    ...     domain = Domain
    ...     trials = ("trials/*.yaml",)
    """

    domain: ClassVar[type[Domain]]
    trials: ClassVar[Sequence[str]] = ()
    plugin: ClassVar[ModuleType | None] = None
    seed: ClassVar[int] = 1
    runs: ClassVar[int] = 2000
    _kept: ClassVar[dict[type, Conformance]] = {}

    @classmethod
    def conformance(cls) -> Conformance:
        """All checks of the domain; prepared once."""
        if cls not in cls._kept:
            here = Path(inspect.getfile(cls)).parent
            files = [f for pattern in cls.trials for f in (sorted(here.glob(pattern)) or [here / pattern])]
            cls._kept[cls] = check_domain(cls.domain, files, plugin=cls.plugin, seed=cls.seed, runs=cls.runs)
        return cls._kept[cls]

    def pytest_generate_tests(self, metafunc: Any) -> None:
        """Make one test of each check, named in words."""
        if "check" in metafunc.fixturenames:
            metafunc.parametrize("check", [c.name for c in CHECKS], ids=[c.words for c in CHECKS])

    def test_conformance(self, check: str) -> None:
        """Pass, fail with what is wrong, or skip with why it cannot be judged."""
        import pytest

        finding = self.conformance().finding(check)
        if finding.outcome == "not judged":
            pytest.skip("; ".join(finding.messages))
        if finding.outcome == "fails":
            pytest.fail(f"not so: {finding.words}\n" + "\n".join(finding.messages), pytrace=False)
