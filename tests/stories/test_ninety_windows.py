"""Ninety windows of the membrane skid: are the sigmas honest, and when did a meter start to drift?

Data by fixed seed: true flows plus normal errors with the sigmas of the case. Shares are over seeds 0, 1, 2, ...; the
full numbers of seeds run with ``-m slow``, fewer with the binomial band of their number otherwise.
"""

from __future__ import annotations

import json

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner
from scipy.stats import binom

import reconcile
from reconcile.cli import main

TAGS = ("F", "R", "D", "P", "T", "B")
TRUTH = np.array([50, 150, 200, 40, 160, 10.0])
SIGMA = np.array([0.5, 1.5, 2.0, 0.4, 1.6, 0.2])
P = TAGS.index("P")
WINDOWS = np.arange(1, 91)
SEED = 20240611

FEW = 25
FULL = pytest.param(100, marks=pytest.mark.slow)
FULLER = pytest.param(200, marks=pytest.mark.slow)


def windows(seed, count=90):
    return TRUTH + np.random.default_rng(seed).normal(size=(count, 6)) * SIGMA


def sliding(seed):
    """P loses 0.05 kg/h a window after window 40."""
    y = windows(seed)
    y[:, P] -= 0.05 * np.maximum(0, WINDOWS - 40)
    return y


def as_readings(y):
    return dict(zip(TAGS, y.T, strict=True))


def within(count, trials, least, most=1.0):
    """Whether a share lies from `least` to `most`; of few trials, whether that is compatible at 99.9 % either side."""
    if trials > FEW:
        return least <= count / trials <= most
    return binom.ppf(0.001, trials, least) <= count <= binom.ppf(0.999, trials, most)


@pytest.fixture(scope="module")
def text():
    from pathlib import Path

    return (Path(__file__).parents[2] / "datasets" / "membrane_skid" / "case.yaml").read_text("utf-8")


@pytest.fixture
def right(write_case, text):
    return reconcile.load_case(write_case(text))


@pytest.fixture
def wrong(write_case, text):
    """The retentate meter declared at 0.4 kg/h, where its spread is 1.6."""
    return reconcile.load_case(write_case(text.replace("sigma: 1.6 kg/h", "sigma: 0.4 kg/h")))


def history(case, y):
    return case.run(as_readings(y)).history


def told(h):
    return " ".join(h.summary().split())


# ------------------------------------------------------------------ sigmas


def test_the_sigma_that_is_wrong_is_named_with_its_factor(wrong):
    h = history(wrong, windows(SEED))
    a = h.audit
    assert round(a.ratio, 2) == 1.34
    assert (round(a.low, 2), round(a.high, 2)) == (0.84, 1.18)
    t = a.meter("T")
    assert (a.status, a.named) == ("one", ("T",))
    assert (round(t.factor, 1), round(t.low, 1), round(t.high, 1)) == (3.5, 2.7, 4.5)
    assert "T by 3.5 (95 %: 2.7 to 4.5) times what its sigma allows" in told(h)


@pytest.mark.parametrize("seeds", [FEW, FULL])
def test_over_the_seeds_it_comes_first_and_the_interval_covers(wrong, seeds):
    first = covers = 0
    for seed in range(seeds):
        a = history(wrong, windows(seed)).audit
        t = a.meter("T")
        first += max(a.meters, key=lambda m: np.nan_to_num(m.gain, nan=-1)).tag == "T"
        covers += t.low <= 4.0 <= t.high
    assert within(first, seeds, 0.95)
    assert within(covers, seeds, 0.88, 0.99)


@pytest.mark.parametrize("seeds", [FEW, FULL])
def test_with_right_sigmas_no_change_is_indicated(right, seeds):
    count = sum(history(right, windows(seed)).audit.status in ("no change", "few snapshots") for seed in range(seeds))
    assert within(count, seeds, 0.90)


def test_the_bleed_meter_is_not_auditable(right):
    h = history(right, windows(SEED))
    assert h.audit.meter("B").reason == "share"
    assert h.audit.meter("B").share == pytest.approx(0.096, abs=5e-4)
    assert np.isnan(h.audit.meter("B").factor)
    assert "Not auditable: B (share checked 0.10)" in told(h)


def test_fewer_than_twenty_windows_are_not_auditable(right):
    h = history(right, windows(SEED, count=19))
    assert h.audit.status == "few"
    assert {m.reason for m in h.audit.meters} == {"few"}
    assert "Not auditable: 19 snapshots say too little of a sigma, 20 are needed" in told(h)
    assert "OVER ALL" not in right.run(as_readings(windows(SEED, count=19))).summary()
    assert "OVER ALL 20 SNAPSHOTS" in right.run(as_readings(windows(SEED, count=20))).summary()


def test_certificates_with_k_2_entered_as_sigmas_are_suspected(right):
    h = history(right, TRUTH + 0.5 * (windows(SEED) - TRUTH))
    assert h.audit.status == "all"
    assert h.audit.too_good
    assert h.audit.overall_low < 0.5 < h.audit.overall_high
    words = told(h)
    assert "sigmas look about 2.1 times too large. Were they certificate values with k = 2?" in words
    assert "Readings agree better than their sigmas allow. Are some computed from others" in words


def test_one_spike_is_not_taken_for_a_wrong_sigma_or_a_steady_fault(right):
    y = windows(SEED)
    y[30, 1] += 60
    h = history(right, y)
    assert h.audit.status == "few snapshots"
    assert h.audit.hangs_on == ("31",)
    assert h.steady.single == "31"
    assert not h.drifts
    o = h.second_opinion("hampel")
    assert o.optimal
    assert np.flatnonzero(o.differs).tolist() == [30]
    recycle = o.variables.index("recycle.flow")
    assert o.values[30, recycle] == pytest.approx(150, abs=4)
    assert "in 1 of 90 snapshots, most in snapshot 31: recycle.flow" in told(h)


# ------------------------------------------------------------------ drift


def test_the_drift_is_named_with_onset_shape_and_rivals(right):
    h = history(right, sliding(SEED))
    (drift,) = h.drifts
    s = drift.stretch
    assert drift.track.name == "P"
    assert s.alarm_down is not None
    assert 41 <= s.alarm_down + 1 <= 62
    # The first snapshot that moves, counted from 0, is the last one that does not, counted from 1.
    assert s.earliest <= 40 <= s.latest
    assert s.shape == "ramp"
    assert s.ramp_gain - s.step_gain > 3.84
    assert s.open_at_alarm
    rivals = {r.name: r for r in drift.rivals}
    assert rivals["F"].correlation == pytest.approx(-0.96, abs=5e-3)
    assert rivals["B"].correlation == pytest.approx(0.95, abs=5e-3)
    assert rivals["F"].excluded
    assert rivals["B"].excluded
    assert not rivals["module.leak"].excluded
    assert rivals["F"].touches == ("tee flow",)
    assert rivals["F"].instead == ("module flow",)
    # The sigmas are right, and the drift must not make them look wrong.
    assert h.audit.status == "no change"
    assert h.audit.about == "pairs"


def test_the_words_for_the_drift(right):
    words = told(history(right, sliding(SEED)))
    assert "P reads low by 2.42 kg/h (± 0.15) at snapshot 90, since snapshot 34 (95 %: 27 to 41)" in words
    assert "It grows, by 0.0425 ± 0.0026 kg/h a snapshot: a jump fits worse by χ² 15.2" in words
    assert "at that moment growth could not yet be told from a jump" in words
    assert "Cannot tell it from: 2.42 kg/h lost at module; they look exactly alike" in words
    assert "Rival: F reads high by 2.39 kg/h, or 2.39 kg/h lost at tee (signature correlation -0.96)" in words
    assert "What differs: F would open tee flow; P would open module flow" in words


@pytest.mark.parametrize("seeds", [FEW, FULLER])
def test_over_the_seeds_the_drift_is_found_in_time(right, seeds):
    alarm, early, covers, onset, ramp, named = 0, 0, 0, [], 0, 0
    for seed in range(seeds):
        h = history(right, sliding(seed))
        (s,) = h.track("P").stretches
        down = None if s.alarm_down is None else s.alarm_down + 1
        alarm += down is not None and down <= 62
        early += down is not None and down < 41
        ramp += s.ramp_gain - s.step_gain > 3.84
        covers += s.earliest <= 40 <= s.latest
        onset.append(s.onset)
        named += bool(h.drifts) and h.drifts[0].track.name in ("P", "module.leak")
    assert within(alarm, seeds, 0.90)
    assert within(early, seeds, 0.0, 0.07)
    assert within(covers, seeds, 0.88, 0.99)
    assert 37 <= np.median(onset) <= 43
    assert within(ramp, seeds, 0.85)
    assert within(named, seeds, 0.90)


@pytest.mark.parametrize("seeds", [FEW, FULL])
def test_without_a_drift_hardly_any_is_named(right, seeds):
    found = sum(bool(history(right, windows(seed)).drifts) for seed in range(seeds))
    assert within(found, seeds, 0.0, 0.05)


def test_at_the_moment_of_the_alarm_the_report_does_not_choose(right):
    y = sliding(SEED)
    alarm = history(right, y).track("P").stretches[0].alarm_down
    h = history(right, y[: alarm + 1])
    (s,) = h.track("P").stretches
    assert s.shape == "open"
    assert not h.drifts
    assert h.watch[0].name == "P"
    assert "Watch P or module.leak: its cumulative sum alarmed at snapshot 51, downwards" in told(h)
    assert "It cannot be told yet whether it grows or jumped" in told(h)


def test_a_calibration_restarts_that_track_alone(write_case, text):
    calibrated = text.replace("sigma: 0.4 kg/h}", "sigma: 0.4 kg/h, calibrated: [2024-03-02T00:00+00:00]}")
    case = reconcile.load_case(write_case(calibrated))
    y = windows(SEED)
    y[:60, P] -= 1.5
    hours = pd.date_range("2024-03-01", periods=90, freq="24min", tz="UTC")
    h = case.run(pd.DataFrame(as_readings(y), index=hours)).history
    assert h.track("P").calibrated == (60,)
    assert all(t.calibrated == () for t in h.tracks if t.name != "P")
    before, after = h.track("P").stretches
    assert (before.last, after.first) == (59, 60)
    assert before.size == pytest.approx(-1.5, abs=0.2)
    p = h.track("P")
    assert p.down[59] > 5
    assert p.down[60] == pytest.approx(max(0.0, -p.sizes[60] / p.sigmas[60] - 0.5))
    assert not after.changed
    drift = h.drifts[0]
    assert (drift.track.name, drift.stretch.last) == ("P", 59)
    words = told(h)
    assert "P was calibrated: its track, and no other, begins anew at 2024-03-02 00:00:00+00:00" in words


def test_calibration_dates_without_times_are_not_used_and_it_is_said(write_case, text):
    calibrated = text.replace("sigma: 0.4 kg/h}", "sigma: 0.4 kg/h, calibrated: [2024-03-02]}")
    h = history(reconcile.load_case(write_case(calibrated)), windows(SEED))
    assert h.track("P").calibrated == ()
    assert "The snapshots have no time, so the calibration dates of P are not used" in told(h)


# ------------------------------------------------------------------ steady and structural


def test_a_steady_bias_too_small_for_one_window_is_named(right):
    y = windows(SEED)
    y[:, 1] += 1.2
    result = right.run(as_readings(y))
    assert result.suspicious.mean() < 0.25
    h = result.history
    assert not h.steady.agrees
    fault = next(f for f in h.steady.faults if f.name == "R")
    assert fault.size == pytest.approx(1.2, abs=4 * fault.sigma)
    assert h.steady.accounts.standing[0].alternatives[0].faults[0].candidate.name == "R"
    assert fault.sigmas < 1
    assert "That is less than one sigma of R" in told(h)


def test_windows_with_different_readings_absent_are_pooled(right):
    y = windows(SEED)
    y[:, P] -= 0.5
    y[::3, 2] = np.nan
    y[1::4, 5] = np.nan
    h = history(right, y)
    assert h.steady.count == 90
    assert h.steady.checks == 3
    assert h.steady.contrast_p > 0.001
    fault = next(f for f in h.steady.faults if f.name == "P")
    assert fault.size == pytest.approx(-0.5, abs=4 * fault.sigma)
    every = next(f for f in history(right, windows(SEED)).steady.faults if f.name == "P")
    assert every.sigma < fault.sigma < 1.5 * every.sigma


def test_a_balance_off_to_one_side_in_every_record_is_structural(right):
    """A side stream leaves the tee before anything reads it: 12 to 36 kg/h, another amount in every window."""
    y = windows(SEED)
    y[:, 0] += np.random.default_rng(1).uniform(12, 36, size=90)
    h = history(right, y)
    (found,) = h.one_sided
    assert (found.node, found.count, found.structural) == ("tee", 90, True)
    assert h.audit.status == "structural"
    assert h.audit.named == ()
    words = told(h)
    assert "Structural error (a missing stream or balance at tee), not one bad meter" in words
    assert "Not auditable while a balance is off to the same side in every record" in words


def test_a_large_constant_bias_is_no_structural_error(right):
    y = windows(SEED)
    y[:, 0] += 15
    h = history(right, y)
    (found,) = h.one_sided
    assert not found.structural
    assert found.meters == ("F",)
    assert found.faults == ("tee.leak",)
    assert "Cannot tell a structural error (a missing stream or balance at tee) from one bad meter: F" in told(h)


def test_healthy_windows_have_no_one_sided_balance(right):
    assert history(right, windows(SEED)).one_sided == ()


# ------------------------------------------------------------------ in and out


def test_the_summary_of_a_run_carries_the_history(right):
    result = right.run(as_readings(sliding(SEED)))
    data = json.loads(json.dumps(result.to_dict(), allow_nan=False))["history"]
    assert data["drifts"][0]["fault"] == "P"
    assert data["drifts"][0]["shape"] == "ramp"
    assert data["sigmas"]["status"] == "no change"
    assert data["second_opinion"]["huber"]["optimal"]
    assert "history" not in right.run(as_readings(windows(SEED, 5))).to_dict()


def test_text_fits_a_terminal_and_plain_ones(right, tmp_path):
    y = sliding(SEED)
    pd.DataFrame(as_readings(y)).to_csv(tmp_path / "ninety.csv", index=False)
    path = str(right.parts.spec.path)
    shown = CliRunner().invoke(main, ["history", path, "--readings", str(tmp_path / "ninety.csv")])
    assert shown.exit_code == 0, shown.output
    assert max(map(len, shown.output.splitlines())) <= 100
    from reconcile.report.history import render_history

    assert render_history(history(right, y), ascii_only=True).isascii()


def test_without_any_check_it_says_so(write_case):
    case = "reconcile: 1\ndomains: {fluid: {unit: kg/h}}\nstreams: {a: outside -> n, b: n -> outside}\n"
    loaded = reconcile.load_case(write_case(case + "meters: {A: {reads: a.flow, unit: kg/h, sigma: 1 kg/h}}\n"))
    h = loaded.run({"A": [1.0, 2.0]}).history
    assert h.to_dict() == {"snapshots": 0}
    assert "No snapshot has a check" in h.summary()
