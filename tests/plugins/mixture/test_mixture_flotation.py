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


def single(accounts):
    """Every standing explanation with one fault, likeliest first."""
    found = [a for e in accounts.standing for a in e.alternatives if len(a.faults) == 1]
    return sorted(found, key=lambda a: -a.probability)


def test_a_rich_feed_sample_is_among_the_likeliest(result):
    # the sample was cut 10 % rich at about 0.78 % Cu; a flow meter that is far off cannot be excluded by one shift alone
    for shift in (7, 8, 9):
        accounts = result.snapshot(shift).accounts
        assert accounts.conclusion.name == "CANNOT_TELL"
        found = {a.faults[0].candidate.name: a for a in single(accounts)}
        fault = found["feed_Cu"].faults[0]
        assert abs(fault.size - 0.078) < 2 * fault.sigma
        assert found["feed_Cu"].probability > 0.15
        assert {f.faults[0].candidate.name for f in single(accounts)[:3]} & {"feed_Cu"}
    for shift in (7, 8):
        assert single(result.snapshot(shift).accounts)[0].faults[0].candidate.name == "feed_Cu"


def test_what_looks_like_it_is_named_with_it(result):
    for shift in (7, 8, 9):
        tied = [
            {a.faults[0].candidate.name for a in e.alternatives if len(a.faults) == 1}
            for e in result.snapshot(shift).accounts.standing
        ]
        assert {"feed_Cu", "tail_Cu", "rougher.holdup.Cu"} in tied


def test_copper_is_balanced_by_hand(result):
    x = dict(zip(result.variables, result.adjusted.T, strict=True))
    copper = {s: x[f"{s}.flow"] * x[f"{s}.Cu"] for s in ("feed", "tail", "concentrate", "rougher_conc", "cleaner_tail")}
    np.testing.assert_allclose(copper["feed"], copper["tail"] + copper["concentrate"], rtol=1e-9)
    np.testing.assert_allclose(copper["rougher_conc"], copper["cleaner_tail"] + copper["concentrate"], rtol=1e-9)
