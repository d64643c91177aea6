"""Planning on the invented membrane skid, before any reading.

Expected figures were computed independently: closed-form update of the covariance for one more meter, and simulation.
"""

from __future__ import annotations

import pytest

import reconcile
from reconcile.planner import place_meters, rehearse_case


@pytest.fixture
def case(datasets):
    return reconcile.load_case(datasets / "membrane_skid")


@pytest.fixture
def reduced(datasets, write_case):
    """The skid with meters on feed, recycle, permeate and bleed only."""
    lines = (datasets / "membrane_skid" / "case.yaml").read_text().splitlines()
    kept = [x for x in lines if not x.startswith(("  D:", "  T:", "readings:"))]
    return reconcile.load_case(write_case("\n".join(kept)))


OFFERS = [
    "recycle.flow = 1.5 kg/h",
    "retentate.flow = 1.6 kg/h",
    "discharge.flow = 2.0 kg/h",
    "permeate.flow = 0.4 kg/h",
]


def ranking(found):
    return {found.offers[p.meters[0]].variable: p.after if p.effect else None for p in found.ranked}


def test_on_the_reduced_rig_the_recycle_is_not_checked(reduced):
    assert reduced.coverage.line("R").share == 0


def test_which_meter_finds_a_fault_of_the_recycle_meter(reduced):
    after = ranking(place_meters(reduced, find="R", offers=OFFERS))
    assert after["recycle.flow"] == pytest.approx(6.88, abs=5e-3)
    assert after["retentate.flow"] == pytest.approx(7.14, abs=5e-3)
    assert after["discharge.flow"] == pytest.approx(8.18, abs=5e-3)
    assert after["permeate.flow"] is None


def test_another_goal_gives_another_ranking(reduced):
    found = place_meters(reduced, find="P", offers=OFFERS)
    after = ranking(found)
    assert found.offers[found.ranked[0].meters[0]].variable == "permeate.flow"
    assert after["permeate.flow"] == pytest.approx(1.66, abs=5e-3)
    assert found.ranked[0].before == pytest.approx(2.17, abs=5e-3)
    # Meters that do not close a second balance around the permeate change (almost) nothing.
    assert after["discharge.flow"] is None or after["discharge.flow"] == pytest.approx(2.15, abs=2e-2)


def test_asking_without_a_goal_is_refused(case):
    with pytest.raises(reconcile.InputError, match="goal-missing"):
        place_meters(case)
    with pytest.raises(reconcile.InputError, match="goal-ambiguous"):
        place_meters(case, find="R", narrow="recovery")


def test_unknown_names_are_refused_with_the_nearest(case):
    with pytest.raises(reconcile.InputError, match=r"did you mean 'feed\.flow'"):
        place_meters(case, narrow="fed.flow")
    with pytest.raises(reconcile.InputError, match="unknown-fault"):
        place_meters(case, find="Q")
    with pytest.raises(reconcile.InputError, match="offer-syntax"):
        place_meters(case, find="R", offers=["feed.flow 0.5"])


def test_a_tie_is_broken_by_a_second_reading_of_one_of_them(datasets):
    crystalliser = reconcile.load_case(datasets / "crystalliser")
    found = place_meters(crystalliser, separate=["F", "R", "mixer.leak"], offers=["feed.flow = 0.3 kg/h"])
    assert found.ranked[0].before == 1.0
    # A loss at the mixer and the recycle meter stay tied: the second reading clears the feed meter only.
    assert not found.ranked[0].effect
    two = place_meters(crystalliser, separate=["F", "R"], offers=["feed.flow = 0.3 kg/h", "slurry.flow = 0.5 kg/h"])
    assert two.ranked[0].effect
    assert two.offers[two.ranked[0].meters[0]].variable == "feed.flow"
    assert not two.ranked[1].effect


def test_a_second_reading_of_the_feed_clears_it(datasets, write_case):
    text = (datasets / "crystalliser" / "case.yaml").read_text().replace("readings: readings.csv\n", "")
    text = text.replace("figures:", "  F2: {reads: feed.flow, unit: kg/h, sigma: 0.3 kg/h}\nfigures:")
    read = {"F": 20.4, "R": 31.1, "S": 49.0, "C": 9.8, "L": 39.3, "W": 2.0, "F2": 20.3}
    s = reconcile.load_case(write_case(text)).run(read).snapshot(0)
    assert (s.test.objective, s.test.checks) == (pytest.approx(19.60, abs=5e-3), 3)
    assert s.fault("F").left == pytest.approx(15.24, abs=5e-3)
    recycle = s.fault("R")
    assert (recycle.size, recycle.sigma, recycle.left) == pytest.approx((2.41, 0.55, 0.10), abs=6e-3)
    assert s.fault("mixer.leak").left == pytest.approx(0.10, abs=5e-3)
    tied = {a.faults[0].candidate.name for a in s.accounts.standing[0].alternatives}
    assert tied == {"R", "mixer.leak"}


def test_the_purge_under_each_explanation(datasets):
    from reconcile.refit import figures_if

    result = reconcile.load_case(datasets / "crystalliser").run()
    found = {a.faults[0].candidate.name: values[0] for a, values in figures_if(result, 0)}
    for name in ("F", "mixer.leak"):
        assert (found[name].value, found[name].sigma) == pytest.approx((10.16, 0.52), abs=5e-3)
    assert (found["R"].value, found["R"].sigma) == pytest.approx((12.61, 0.28), abs=5e-3)


def test_noticed_is_not_named(case):
    found = rehearse_case(case, inject=["P = 3 kg/h"], trials=2000, seed=1)
    assert found.noticed("P").value == pytest.approx(0.98, abs=0.02)
    assert found.named("P").value == pytest.approx(0.60, abs=0.05)


def test_a_large_fault_is_noticed_and_named_and_false_alarms_are_as_stated(case):
    found = rehearse_case(case, inject=["R = 9 kg/h"], trials=2000, seed=2)
    assert found.noticed("R").value >= 0.96
    assert found.named("R").value >= 0.94
    assert 0.04 <= found.found.false_alarm.value <= 0.06


def test_the_stated_smallest_bias_is_found_with_the_stated_power(case):
    import numpy as np

    from reconcile.coverage import expected_group
    from reconcile.snapshot import signatures

    shifts = signatures(case.model, expected_group(case))
    rng = np.random.default_rng(5)
    for i, tag in ((1, "R"), (3, "P")):
        f = shifts[:, i]
        size = case.coverage.line(tag).smallest
        p = rng.normal(size=(2000, 3)) + size * f
        found = np.abs(p @ f) / np.linalg.norm(f) > 1.959963984540054
        assert found.mean() == pytest.approx(0.90, abs=0.03)
