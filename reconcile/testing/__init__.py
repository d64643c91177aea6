"""The conformance kit for domains: what every domain must hold, checked on exact states that its author works out.

Write a conformance file (a case, one exact state, what flows into which balance) and a test class::

    from reconcile.testing import DomainSuite
    from my_domain import MyDomain

    class TestMyDomain(DomainSuite):
        domain = MyDomain
        trials = ("trials/*.yaml",)

or call `check_domain` and print what it returns.
"""

from __future__ import annotations

from .bench import Check
from .conformance import CHECKS, Conformance, Finding, check_domain
from .suite import DomainSuite

__all__ = ["CHECKS", "Check", "Conformance", "DomainSuite", "Finding", "check_domain"]
