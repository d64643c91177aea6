"""A chemostat whose carbon dioxide analyser reads low (invented figures), worked by hand beside it."""

import numpy as np
import pytest
import scipy.linalg
from chemostat_by_hand import CASE, CHECKS, TAGS, adjusted, objective, one_fault

import reconcile

READ = dict(zip(TAGS, [10.1, 28.2, 26.4, 30.6], strict=True))


@pytest.fixture(scope="module")
def result(tmp_path_factory):
    path = tmp_path_factory.mktemp("chemostat") / "case.yaml"
    path.write_text(CASE, encoding="utf-8")
    return reconcile.load_case(path).run(READ)


def projector(rows):
    basis = scipy.linalg.orth(np.asarray(rows).T, rcond=1e-10)
    return basis @ basis.T


def test_four_elements_leave_two_checks_carbon_and_electrons(result):
    # water and ammonia are not measured and take two of the four balances with them
    signatures = result.group(0).signatures
    assert signatures.shape == (2, 4)
    assert projector(signatures) == pytest.approx(projector(CHECKS), abs=1e-9)


def test_carbon_recovery_and_respiratory_quotient_of_the_raw_readings(result):
    carbon = next(b for b in result.snapshot(0).balances if b.name == "reactor carbon")
    assert carbon.outflow / carbon.inflow == pytest.approx(0.941, abs=5e-4)
    (rq,) = result.figure_values()
    assert rq.raw == pytest.approx(0.936, abs=5e-4)
    # 26.4 ± 0.9 over 28.2 ± 0.9, independent: relative variances add
    assert rq.raw_sigma == pytest.approx(26.4 / 28.2 * np.hypot(0.9 / 26.4, 0.9 / 28.2), rel=1e-6)


def test_test_of_all_readings_and_adjusted_values(result):
    s = result.snapshot(0)
    assert s.test.objective == pytest.approx(objective(READ), rel=1e-9)
    assert (s.test.objective, s.test.limit) == pytest.approx((8.13, 5.99), abs=5e-3)
    assert s.test.checks == 2
    value, sigma = adjusted(READ)
    assert [s.reading(t).adjusted for t in TAGS] == pytest.approx(value, rel=1e-9)
    assert [s.reading(t).sigma for t in TAGS] == pytest.approx(sigma, rel=1e-9)


@pytest.mark.parametrize(
    ("fault", "size", "sigma", "left", "stands"),
    [
        ("CO2", -3.39, 1.19, 0.02, True),
        ("O2", 2.61, 1.21, 3.51, True),  # below 3.84: not excluded
        ("glucose", None, None, 6.83, False),
        ("biomass", None, None, 7.22, False),
        ("acetate", None, None, 6.83, False),
        ("ethanol", None, None, 8.01, False),
    ],
)
def test_each_single_fault(result, fault, size, sigma, left, stands):
    s = result.snapshot(0)
    name = fault if fault in TAGS else f"reactor.hidden_{fault}"
    line = s.fault(name)
    assert (line.size, line.sigma, line.left) == pytest.approx(one_fault(READ, fault), rel=1e-9)
    assert line.left == pytest.approx(left, abs=5e-3)
    if size is not None:
        assert (line.size, line.sigma) == pytest.approx((size, sigma), abs=5e-3)
    alone = [x.faults[0].candidate.name for a in s.accounts.standing for x in a.alternatives if len(x.faults) == 1]
    assert (name in alone) is stands


def test_a_lost_gas_is_listed_as_the_twin_of_a_low_reading(result):
    s = result.snapshot(0)
    lost = s.fault("offgas.carbon_dioxide.lost")
    assert lost.left == pytest.approx(s.fault("CO2").left, abs=1e-9)
    assert lost.size == pytest.approx(-s.fault("CO2").size, rel=1e-9)
    best = s.accounts.standing[0]
    assert {a.faults[0].candidate.name for a in best.alternatives} == {"CO2", "offgas.carbon_dioxide.lost"}


def test_the_words(result):
    text = " ".join(result.summary().split())
    assert "CO2 reads low by 3.4 mmol/h" in text
    assert "or 3.4 mmol/h of carbon_dioxide lost from offgas before its meter" in text
    assert "No reading here can tell these apart" in text
    assert "check the gas line of offgas for leaks with soap solution or a bubble test" in text
    assert "O2 reads high by 2.6 mmol/h" in text
    assert "bucket" not in text  # nobody catches moles in a bucket
