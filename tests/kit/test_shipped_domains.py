"""Every domain that comes along passes the kit that a stranger's domain passes."""

import pytest
from reconcile_charge import Charge
from reconcile_elements import Elements
from reconcile_energy import Energy
from reconcile_fluid import Fluid
from reconcile_mixture import Mixture
from reconcile_perfusion import Perfusion

from reconcile.domains import load_plugins
from reconcile.testing import DomainSuite

WITH_PRODUCTS = 100
"""Runs without a fault where each needs a nonlinear solution; the 2000 of the kit are made by the slow test below."""


class TestFluid(DomainSuite):
    domain = Fluid
    trials = ("trials/fluid*.yaml",)
    runs = WITH_PRODUCTS


class TestMixture(DomainSuite):
    domain = Mixture
    trials = ("trials/mixture*.yaml",)
    runs = WITH_PRODUCTS


class TestElements(DomainSuite):
    domain = Elements
    trials = ("trials/elements*.yaml",)


class TestCharge(DomainSuite):
    domain = Charge
    trials = ("trials/charge*.yaml",)


class TestEnergy(DomainSuite):
    domain = Energy
    trials = ("trials/energy*.yaml",)
    runs = WITH_PRODUCTS


class TestPerfusion(DomainSuite):
    domain = Perfusion
    trials = ("trials/perfusion*.yaml",)
    runs = WITH_PRODUCTS


def test_no_shipped_domain_is_left_out():
    on_trial = {k.domain.name for k in DomainSuite.__subclasses__() if k.__module__ == __name__}
    shipped = {n for n, i in load_plugins().domains.items() if i.distribution == "reconcile-flows"}
    assert on_trial == shipped


@pytest.mark.parametrize(
    "suite", [k for k in DomainSuite.__subclasses__() if k.__module__ == __name__], ids=lambda k: k.domain.name
)
def test_nothing_is_left_unjudged(suite):
    """A check that skips for want of something in the trial is a gap of the trial."""
    unjudged = [f for f in suite.conformance().findings if f.outcome == "not judged"]
    assert not unjudged, "\n".join(str(f) for f in unjudged)


@pytest.mark.slow
@pytest.mark.parametrize(
    "suite",
    [k for k in DomainSuite.__subclasses__() if k.__module__ == __name__ and k.runs == WITH_PRODUCTS],
    ids=lambda k: k.domain.name,
)
def test_four_to_six_percent_of_2000_runs_without_a_fault_alarm(suite):
    class Longer(suite):
        runs = 2000

    finding = Longer.conformance().finding("alarms")
    assert finding.outcome == "passes", str(finding)
