"""A charge made up from counted bags (invented figures): the sigma of a count, and whose moisture a mass holds.

A count of whole bags is a mass with four errors: the packing scale (the same for every bag, so a part of the reading),
the tolerance of the single bag (independent, so it grows with the root of the count), a bag begun and not emptied
(rectangular over one bag, GUM F.2.2.1), and a miscount, which is no sigma but a fault.
"""

from __future__ import annotations

import numpy as np
import pytest

import reconcile

BAG, TOLERANCE, COUNT = 25.0, 0.2, 40
CASE = f"""\
reconcile: 1
title: Ore from bags, dried before the furnace (invented)
domains:
  mixture: {{unit: kg, components: {{water: "%"}}, losses: false, holdup: false}}
streams:
  bags:   outside -> drier
  vapour: {{path: drier -> outside, pure: water}}
  dry:    drier -> outside
meters:
  # Wet as charged: {COUNT} bags of {BAG:g} kg, each +/- {TOLERANCE} kg: {TOLERANCE} / sqrt(3) * sqrt({COUNT}) = 0.73 kg.
  COUNT: {{reads: bags.flow, unit: kg, sigma: [0.3 % of reading, 0.7303 kg], resolution: {BAG:g} kg}}
  M-1:   {{reads: bags.water, unit: "%", accuracy: 0.5 % absolute}}
  BIN:   {{reads: dry.flow, unit: kg, sigma: 2 kg}}
  M-2:   {{reads: dry.water, unit: "%", accuracy: 0.1 % absolute}}
figures:
  dry_matter_from_bags: bags.flow * (1 - 0.01 * bags.water)
"""


@pytest.fixture
def case(write_case):
    return reconcile.load_case(write_case(CASE))


def test_the_stated_components_are_the_spread_of_such_counts(case):
    rng = np.random.default_rng(12)
    n = 20_000
    scale = 1 + 0.003 * rng.normal(size=n)
    bags = BAG * COUNT + rng.uniform(-TOLERANCE, TOLERANCE, (n, COUNT)).sum(axis=1)
    begun = rng.uniform(-BAG / 2, BAG / 2, n)
    spread = np.std(bags * scale + begun)
    stated = case.parts.spec.meters["COUNT"].sigma.at(BAG * COUNT)
    assert stated == pytest.approx(np.sqrt(3.0**2 + COUNT * TOLERANCE**2 / 3 + BAG**2 / 12), rel=1e-4)
    # The standard error of a standard deviation of 20 000 draws is 0.5 %; four of them.
    assert spread == pytest.approx(stated, rel=0.02)


READINGS = {"COUNT": BAG * COUNT, "M-1": 4.1, "BIN": 962.0, "M-2": 0.2}


def by_hand():
    """Closure of the dry matter and its standard deviation, first order, all masses wet as they are weighed."""
    wet, w, dry, d = 1000.0, 0.041, 962.0, 0.002
    sigma = np.array([np.sqrt(9 + 0.7303**2 + 625 / 12), 0.005 / np.sqrt(3), 2.0, 0.001 / np.sqrt(3)])
    slopes = np.array([1 - w, -wet, -(1 - d), dry])
    return wet * (1 - w) - dry * (1 - d), float(np.linalg.norm(slopes * sigma))


def test_dry_matter_closes_on_the_stated_basis(case):
    s = case.run(READINGS).snapshot(0)
    closure, spread = by_hand()
    assert s.test.checks == 1
    # First order by hand; the second-order terms of 0.3 % moisture on 8 kg are 0.1 % of the closure.
    assert s.test.objective == pytest.approx((closure / spread) ** 2, rel=5e-3)
    assert s.test.status == "agrees"


def test_moisture_on_the_other_basis_moves_the_dry_matter(case):
    # 4.275 % of the dry matter is 4.1 % of the wet mass; entered as if it were of the wet mass, it is a shift.
    on_dry = {**READINGS, "M-1": 100 * 0.041 / (1 - 0.041)}
    right, wrong = (case.run(r).figure_values(0)[0] for r in (READINGS, on_dry))
    assert right.raw == pytest.approx(959.0, abs=1e-9)
    assert wrong.raw == pytest.approx(1000 * (1 - 0.041 / 0.959), abs=1e-9)
    # 1.75 kg of dry matter are lost to the wrong basis, more than half the moisture's own sigma.
    assert right.raw - wrong.raw == pytest.approx(1.753, abs=1e-3)


@pytest.mark.parametrize("miscounted", [-2, 1, 3])
def test_a_miscount_is_a_fault_of_whole_bags(case, miscounted):
    s = case.run({**READINGS, "COUNT": BAG * (COUNT + miscounted)}).snapshot(0)
    assert s.test.status == "disagrees"
    assert round(s.fault("COUNT").size / BAG) == miscounted
    # One check cannot tell the count from the bin, so the count alone must not be named.
    assert "Most likely COUNT" not in case.run({**READINGS, "COUNT": BAG * (COUNT + miscounted)}).summary()
