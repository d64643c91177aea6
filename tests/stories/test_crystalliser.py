"""A crystalliser loop with an unmeasured purge (invented figures): what the rig can tell at all.

Expected values were computed independently (projection by hand: two checks, F + R - S and S - C - L).
"""

from __future__ import annotations

import pytest

import reconcile


@pytest.fixture
def case(datasets):
    return reconcile.load_case(datasets / "crystalliser")


def test_classification_with_reasons(case):
    s = case.run().snapshot(0)
    assert {r.tag: r.klass for r in s.readings} == {
        **dict.fromkeys(["F", "R", "S", "C", "L"], "checked"),
        "W": "not checked",
    }
    assert s.variable("purge.flow").klass == "calculated"
    for name in ("vapour.flow", "drain.flow"):
        line = s.variable(name)
        assert line.klass == "cannot be calculated"
        assert line.reason == "only vapour.flow + drain.flow is known"
    assert s.checks_in_words == ("F + R - S = 0", "S - C - L = 0")


def test_a_meter_or_a_loss_cannot_be_told(case):
    result = case.run()
    s = result.snapshot(0)
    assert s.test.objective == pytest.approx(19.23, abs=5e-3)
    assert s.test.checks == 2
    assert s.test.limit == pytest.approx(5.99, abs=5e-3)
    for name in ("F", "R"):
        line = s.fault(name)
        assert line.z == pytest.approx(4.383, abs=5e-4)
        assert (line.size, line.sigma) == pytest.approx((2.44, 0.56), abs=5e-3)
        assert line.left == pytest.approx(0.02, abs=5e-3)
    loss = s.fault("mixer.leak")
    assert (loss.size, loss.left) == pytest.approx((2.44, 0.02), abs=5e-3)
    standing = s.accounts.standing
    assert len(standing) == 1
    assert {a.faults[0].candidate.name for a in standing[0].alternatives} == {"F", "R", "mixer.leak"}
    text = result.summary()
    assert "Cannot tell" in text
    assert "Most likely" not in text
    assert {s.reading(t).word for t in ("F", "R")} == {"tied"}


def test_the_other_class_and_the_slurry_meter_are_rejected(case):
    s = case.run().snapshot(0)
    assert s.fault("C").left == pytest.approx(13.89, abs=5e-3)
    assert s.fault("L").left == pytest.approx(13.89, abs=5e-3)
    assert s.fault("S").left == pytest.approx(14.40, abs=5e-3)
    assert "S alone leaves χ² 14.40" in case.run().summary()


def test_the_unchecked_reading_and_what_would_help(case):
    from reconcile.report.coverage import render_coverage

    assert case.run().snapshot(0).reading("W").word == "not checked"
    line = case.coverage.line("W")
    assert line.share == 0
    assert line.needs == (("purge.flow",),)
    text = render_coverage(case.coverage)
    assert "Nothing in this network would notice an error of W. Reading purge.flow would change that." in text


def test_the_purge_is_smeared(case):
    figure = case.run().figure_values()[0]
    assert (figure.value, figure.sigma) == pytest.approx((12.12, 0.26), abs=5e-3)
