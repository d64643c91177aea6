"""An isolated kidney (invented figures): flows times concentrations.

Expected values were computed independently by a general constrained solver.
"""

from __future__ import annotations

import numpy as np
import pytest

import reconcile


@pytest.fixture(scope="module")
def result():
    from pathlib import Path

    return reconcile.load_case(Path(__file__).parents[2] / "datasets" / "isolated_kidney").run()


def test_the_good_run(result):
    assert result.adjusted[0] == pytest.approx([119.87, 118.35, 1.5225, 1.0188, 0.8810, 11.73], abs=5e-3)
    s = result.snapshot(0)
    assert s.test.objective == pytest.approx(1.458, abs=5e-4)
    assert (s.test.checks, s.test.p) == (2, pytest.approx(0.48, abs=5e-3))
    assert s.steps <= 10
    for b in s.balances:
        assert abs(b.after) <= 1e-9 * b.scale


def test_a_second_start_gives_the_same(result):
    from dataclasses import replace

    from reconcile.adjust.solve import solve
    from reconcile.refit import problem_of

    model = result.model
    problem = problem_of(model, result.settings)
    base = model.to_base(result.readings)[0]
    rng = np.random.default_rng(4)
    for _ in range(3):
        far = replace(problem, readings=base, start=base[0] * np.exp(rng.normal(size=model.size)))
        start = far.start.copy()
        start[list(model.fixed)] = list(model.fixed.values())
        again = solve(replace(far, start=start), names=str, row_names=str)
        np.testing.assert_allclose(again.x[model.shown], result.adjusted[0], rtol=1e-8)


def test_clearance_with_the_full_covariance(result):
    figure = result.figure_values(0)[0]
    assert (figure.raw, figure.raw_sigma) == pytest.approx((17.27, 0.65), abs=5e-3)
    assert (figure.value, figure.sigma) == pytest.approx((17.53, 0.57), abs=5e-3)
    assert figure.diagonal_sigma == pytest.approx(0.61, abs=5e-3)


def test_a_slow_probe_cannot_be_told_from_its_rivals(result):
    s = result.snapshot(1)
    assert s.test.objective == pytest.approx(32.5, abs=0.05)
    high = s.fault("Qa")
    assert (high.size, high.sigma) == pytest.approx((19.3, 3.4), abs=0.05)
    low = s.fault("Qv")
    assert (low.size, low.sigma) == pytest.approx((-19.0, 3.4), abs=0.06)
    loss = s.fault("kidney.leak")
    assert (loss.size, loss.sigma) == pytest.approx((19.1, 3.4), abs=0.1)
    exact = {
        a.faults[0].candidate.name: left
        for account in s.accounts.standing
        for a, left in zip(account.alternatives, account.refitted, strict=True)
    }
    assert exact == {
        "Qa": pytest.approx(0.00, abs=5e-3),
        "Qv": pytest.approx(0.73, abs=5e-3),
        "kidney.leak": pytest.approx(0.73, abs=5e-3),
    }
    for name in ("Qu", "Ca", "Cv", "Cu"):
        assert s.fault(name).left > 31
    assert "Cannot tell" in result.summary()


def test_first_order_and_exact_leftovers_are_both_printed_and_named(result):
    from reconcile.report.text import render

    s = result.snapshot(1)
    assert s.fault("Qv").left == pytest.approx(0.79, abs=5e-3)
    assert abs(s.fault("Qv").left - 0.734) < 0.1 * 0.734
    text = " ".join(render(result, snapshot=1).split())
    assert "refitted χ² 0.73" in text
    assert "first-order χ² 0.79" in text


def test_closed_balances_prove_little(result):
    # Both balances close after adjustment although either flow is then 8 to 10 mL/min off.
    s = result.snapshot(1)
    assert all(abs(b.after) <= 1e-9 * b.scale for b in s.balances)
    assert result.adjusted[1][:2] == pytest.approx([111.8, 110.3], abs=0.05)


def test_a_concentration_in_another_kind_of_unit_is_refused(datasets, write_case):
    text = (datasets / "isolated_kidney" / "case.yaml").read_text()
    text = text.replace("unit: mg/dL, sigma: 0.3 mg/dL", "unit: umol/L, sigma: 30 umol/L")
    with pytest.raises(reconcile.InputError, match="Cu") as caught:
        reconcile.load_case(write_case(text))
    assert "case.yaml:" in str(caught.value)
