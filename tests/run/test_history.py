"""History of cases with products and percent sigmas, and of every shipped data set."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

import reconcile

DATASETS = Path(__file__).parents[2] / "datasets"
SHIPPED = sorted(p.parent.name for p in DATASETS.glob("*/case.yaml") if (p.parent / "readings.csv").exists())

# True values of the kidney bench that close both balances (invented), and the sigmas of its case.
KIDNEY = {"Qa": 120.0, "Qv": 118.5, "Qu": 1.5, "Ca": 1.02, "Cv": (120 * 1.02 - 1.5 * 11.7) / 118.5, "Cu": 11.7}
SPREAD = {"Qa": 2.4, "Qv": 2.4, "Qu": 0.03, "Ca": 0.02, "Cv": 0.02, "Cu": 0.3}


@pytest.fixture(scope="module")
def kidney():
    return reconcile.load_case(DATASETS / "isolated_kidney")


def readings(seed, count=40, **bias):
    rng = np.random.default_rng(seed)
    return {t: v + bias.get(t, 0.0) + SPREAD[t] * rng.normal(size=count) for t, v in KIDNEY.items()}


@pytest.mark.parametrize("name", SHIPPED)
def test_every_data_set_has_a_history_in_text_and_json(name):
    h = reconcile.load_case(DATASETS / name).run().history
    data = json.loads(json.dumps(h.to_dict(), allow_nan=False))
    assert data["snapshots"] == h.count
    text = h.summary()
    assert max(len(line) for line in text.splitlines()) <= 100
    assert "nan" not in text.lower().replace("nanog", "")


def test_products_healthy_snapshots_agree(kidney):
    h = kidney.run(readings(1)).history
    assert h.count == 40
    assert h.steady.agrees
    assert h.audit.status == "no change"
    assert not h.drifts
    assert h.levels.outcome == "nothing"


def test_products_a_steady_bias_is_named_with_its_twins(kidney):
    """A venous probe 6 ml/min slow: within three sigmas of one snapshot, clear in forty."""
    result = kidney.run(readings(2, Qv=-6.0))
    assert result.suspicious.mean() < 0.6
    h = result.history
    assert not h.steady.agrees
    fault = next(f for f in h.steady.faults if f.name == "Qv")
    assert fault.size == pytest.approx(-6.0, abs=4 * fault.sigma)
    assert fault.sigma < 1.0
    named = {f.candidate.name for e in h.steady.accounts.standing for a in e.alternatives for f in a.faults}
    assert {"Qv", "Qa"} <= named
    # The bias is taken out before the sigmas are judged.
    assert h.audit.about == "mean"
    assert h.audit.status == "no change"


def test_products_one_linearisation_serves_the_robust_estimate_and_it_says_so(kidney):
    given = readings(3)
    given["Qa"][4] += 40
    h = kidney.run(given).history
    for loss in ("huber", "welsch", "hampel"):
        o = h.second_opinion(loss)
        assert o.linearised
        assert o.optimal
    assert h.second_opinion("hampel").differs[4]
    assert "Balances hold products: each estimate is that of one linearisation" in " ".join(h.summary().split())


def test_products_a_wrong_sigma_is_found(kidney):
    given = readings(4, count=60)
    rng = np.random.default_rng(5)
    given["Cv"] = KIDNEY["Cv"] + 3 * SPREAD["Cv"] * rng.normal(size=60)
    a = kidney.run(given).history.audit
    # One check weighs the three concentrations together, so that their factors cannot be separated.
    assert a.status == "rivals"
    assert {"Ca", "Cv", "Cu"} <= set(a.named)
    assert a.meter("Cv").reason == "tied"
    assert a.meter("Cv").low <= 3 <= a.meter("Cv").high


@pytest.mark.slow
def test_products_the_pool_alarms_as_often_as_stated(kidney):
    """Without a fault, 200 campaigns of twenty snapshots at the level of 5 %; band of 99.9 %."""
    from scipy.stats import binom

    alarms = sum(not kidney.run(readings(100 + s, count=20)).history.steady.agrees for s in range(200))
    low, high = binom.interval(0.999, 200, 0.05)
    assert low <= alarms <= high


def test_a_value_that_its_own_fault_would_explain_is_no_regressor():
    """A small reading whose true value is not known from the others cannot be tried for an error of scale."""
    text = (
        "reconcile: 1\ndomains: {fluid: {unit: kg/h}}\nstreams: {a: outside -> n, b: n -> outside, c: n -> outside}\n"
        "meters:\n  A: {reads: a.flow, unit: kg/h, sigma: 1 kg/h}\n  B: {reads: b.flow, unit: kg/h, sigma: 1 kg/h}\n"
        "  C: {reads: c.flow, unit: kg/h, sigma: 0.1 kg/h}\n"
    )
    import tempfile

    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "case.yaml"
        path.write_text(text, "utf-8")
        case = reconcile.load_case(path)
        rng = np.random.default_rng(6)
        b, c = rng.uniform(2, 60, 30), rng.uniform(0.1, 0.3, 30)
        noise = rng.normal(size=(30, 3))
        h = case.run({"A": b + c + 3 + noise[:, 0], "B": b + noise[:, 1], "C": c + 0.1 * noise[:, 2]}).history
    assert h.levels.untried == ("C",)
    assert h.levels.outcome == "constant"
