"""Mix-ups that need no unknown size: signs, swaps and unit factors."""

from __future__ import annotations

import pytest

import reconcile
from reconcile.mixups import mixups_of


@pytest.fixture
def skid(datasets):
    return reconcile.load_case(datasets / "membrane_skid")


GOOD = {"F": 50.3, "R": 150.2, "D": 201.2, "P": 39.8, "T": 161.0, "B": 10.1}


def test_nothing_is_tried_where_the_readings_agree(skid):
    assert mixups_of(skid.run(GOOD), 0) == ()


def test_a_reversed_sign(skid):
    found = mixups_of(skid.run({**GOOD, "P": -39.8}), 0)
    assert (found[0].kind, found[0].tags) == ("sign", ("P",))
    assert found[0].left == pytest.approx(skid.run(GOOD).objective[0], rel=1e-9)


def test_two_swapped_meters(skid):
    result = skid.run({**GOOD, "F": 39.8, "P": 50.3})
    found = mixups_of(result, 0)
    assert ("swap", {"F", "P"}) in [(m.kind, set(m.tags)) for m in found]
    assert "are swapped" in result.summary()


@pytest.mark.parametrize(("factor", "word"), [(60.0, "60 times too large"), (1 / 1000, "1000 times too small")])
def test_a_unit_factor(skid, factor, word):
    result = skid.run({**GOOD, "B": 10.1 * factor})
    found = mixups_of(result, 0)
    assert any(m.kind == "factor" and m.tags == ("B",) and word in m.words for m in found)


def test_a_plain_bias_is_no_mixup(skid):
    assert mixups_of(skid.run({**GOOD, "R": 158.6}), 0) == ()


def test_with_products_it_is_solved_again(datasets):
    kidney = reconcile.load_case(datasets / "isolated_kidney")
    read = {"Qa": 121.5, "Qv": 116.9, "Qu": 1.52, "Ca": 0.87, "Cv": 1.03, "Cu": 11.7}
    found = mixups_of(kidney.run(read), 0)
    assert ("swap", {"Ca", "Cv"}) in [(m.kind, set(m.tags)) for m in found]


def test_a_string_entered_as_charging(datasets):
    bench = reconcile.load_case(datasets / "battery_bench")
    found = mixups_of(bench.run({"Q0": 24.0, "Q1": -7.9, "Q2": 8.1, "Q3": 7.7}), 0)
    assert ("sign", ("Q1",)) in [(m.kind, m.tags) for m in found]
