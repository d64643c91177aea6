"""The invented flotation circuit of the data sets, from case file to explanation."""

from pathlib import Path

import numpy as np
import pytest

from reconcile.run import load_case

FOLDER = Path(__file__).parents[3] / "datasets" / "flotation"


@pytest.fixture(scope="module")
def result():
    return load_case(FOLDER).run()


def test_checks_are_counted(result):
    # 8 balances over two nodes (total and three components each) less 3 flows that are not read
    assert set(result.checks) == {5}


def test_a_rich_feed_sample_is_the_likeliest_fault(result):
    for shift in (7, 8, 9):
        likeliest = result.snapshot(shift).accounts.standing[0].alternatives[0]
        (fault,) = likeliest.faults
        assert fault.candidate.name == "feed_Cu"
        # the sample was cut 10 % rich at about 0.78 % Cu
        assert abs(fault.size - 0.078) < 2 * fault.sigma


def test_what_looks_like_it_is_named_with_it(result):
    alike = result.snapshot(9).accounts.standing[0].alternatives
    names = {f.candidate.name for a in alike for f in a.faults}
    assert names == {"feed_Cu", "tail_Cu", "rougher.holdup.Cu"}


def test_copper_is_balanced_by_hand(result):
    x = dict(zip(result.variables, result.adjusted.T, strict=True))
    copper = {s: x[f"{s}.flow"] * x[f"{s}.Cu"] for s in ("feed", "tail", "concentrate", "rougher_conc", "cleaner_tail")}
    np.testing.assert_allclose(copper["feed"], copper["tail"] + copper["concentrate"], rtol=1e-9)
    np.testing.assert_allclose(copper["rougher_conc"], copper["cleaner_tail"] + copper["concentrate"], rtol=1e-9)
