"""Cases with very many balances: those that fit are adjusted, those that do not are refused before anything is worked out."""

from __future__ import annotations

import numpy as np
import pytest

import reconcile
from reconcile.assemble import MOST_BALANCES
from reconcile.errors import InputError

PLUGIN = """
import numpy as np
from reconcile import Domain, hookimpl

class Counts(Domain):
    name = "counts"
    version = "1"
    options = None

    def build(self, network, system, options):
        flow = system.variables("count", network.streams, unit="1/h")
        system.require(network.incidence @ flow == 0, names=network.nodes, kind="count", unit="1/h")
        again = np.ones(({again}, 1)) @ (network.incidence @ flow)
        names = [f"again {{i}}" for i in range({again})]
        system.require(again == 0, names=names, kind="count", unit="1/h")

@hookimpl
def reconcile_domains():
    return [Counts]
"""
CASE = """
reconcile: 1
title: Counted things (invented)
domains: {counts: {}}
streams: {a: outside -> tank, b: tank -> outside}
meters:
  A: {reads: a.count, unit: 1/h, sigma: 1 1/h}
  B: {reads: b.count, unit: 1/h, sigma: 1 1/h}
"""


def counted(folder, again):
    (folder / "guest.py").write_text(PLUGIN.format(again=again), encoding="utf-8")
    (folder / "case.yaml").write_text(CASE, encoding="utf-8")
    return reconcile.load_case(folder / "case.yaml", plugins=[folder / "guest.py"])


def test_the_same_balance_again_and_again_is_one_check(tmp_path):
    result = counted(tmp_path, 800).run({"A": 10.0, "B": 11.0})
    assert result.checks[0] == 1
    np.testing.assert_allclose(result.adjusted[0], [10.5, 10.5])
    found = result.snapshot(0)
    assert len(found.checks_in_words) == 1
    assert len(found.dependent) == 800
    assert found.dependent[-1] == "again 799 follows from tank"


def test_more_balances_than_fit_are_refused_with_their_number(tmp_path):
    with pytest.raises(InputError) as refused:
        counted(tmp_path, MOST_BALANCES)
    (problem,) = refused.value.problems
    assert problem.code == "too-large"
    assert f"{MOST_BALANCES + 1} balances in 2 variables, written by counts" in problem.message
    assert f"at most {MOST_BALANCES}" in problem.message
    assert "make a case of each part" in problem.hint
