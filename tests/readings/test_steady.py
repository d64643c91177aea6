"""Steady tests and the sigma of a mean, against published figures, references and simulation."""

import numpy as np
import pytest
from scipy import stats

from reconcile.readings.steady import (
    R_CRITICAL,
    autocorrelation_time,
    mean_sigma,
    r_statistic,
    r_test,
    slope_test,
)


def ar1(rng, n, phi, size=None):
    """First-order autoregressive noise of unit variance; its autocorrelation time is (1 + phi)/(1 - phi)."""
    shape = (n,) if size is None else (size, n)
    out = rng.normal(size=shape)
    for i in range(1, n):
        out[..., i] = phi * out[..., i - 1] + np.sqrt(1 - phi**2) * out[..., i]
    return out


def test_critical_value_recalled_from_the_paper():
    """Cao & Rhinehart 1995: 1.44 for (0.2, 0.1, 0.1) at 95 %, recalled from memory."""
    assert R_CRITICAL[0.2, 0.1, 0.1][0.05] == pytest.approx(1.44, abs=0.005)


@pytest.mark.parametrize("lambdas", sorted(R_CRITICAL))
def test_critical_values_by_simulation(lambdas):
    """One long series of independent noise: the share of R above each limit is its level.

    R is correlated over about 1/l3 samples; 200 000 samples are about 4000 independent ones, so the 5 % share has
    a standard error of about 0.35 %.
    """
    x = np.random.default_rng(1995).normal(size=200_000)
    r = r_statistic(x, lambdas)[1000:]
    for level, tolerance in ((0.10, 0.012), (0.05, 0.010), (0.01, 0.005)):
        assert np.mean(r > R_CRITICAL[lambdas][level]) == pytest.approx(level, abs=tolerance)
    assert np.median(r) == pytest.approx(1.0, abs=0.02)


def test_the_statistic_worked_by_hand():
    """Three steps of the recursion, from start values mean 2, d2 = 2.5 and v2 = d2 / 1.8."""
    x = np.array([1.0, 2.0, 1.0, 3.0, 3.0])
    head = np.mean(np.diff(x) ** 2)
    xf, v2, d2 = 2.0, head / 1.8, head
    assert head == 1.5
    expected = []
    for i, value in enumerate(x):
        v2 = 0.1 * (value - xf) ** 2 + 0.9 * v2
        xf = 0.2 * value + 0.8 * xf
        if i:
            d2 = 0.1 * (value - x[i - 1]) ** 2 + 0.9 * d2
        expected.append(1.8 * v2 / d2)
    np.testing.assert_allclose(r_statistic(x), expected, rtol=1e-14)


def test_r_finds_a_ramp_and_leaves_a_flat_line():
    rng = np.random.default_rng(2)
    noise = rng.normal(size=200)
    assert r_test(noise).steady
    ramp = r_test(noise + 0.5 * np.arange(200))
    assert not ramp.steady
    assert ramp.r > ramp.limit == 1.734
    assert r_test(np.full(50, 3.0)).steady
    with pytest.raises(ValueError, match="no critical values for lambdas"):
        r_test(noise, (0.3, 0.1, 0.1))
    with pytest.raises(ValueError, match="no critical value at level"):
        r_test(noise, level=0.02)


def test_slope_of_independent_noise_is_that_of_the_reference():
    """Against scipy.stats.linregress; equal where no autocorrelation is found, never surer elsewhere."""
    rng = np.random.default_rng(4)
    equal = 0
    for _ in range(200):
        t = np.sort(rng.uniform(0, 10, 25))
        x = 3.0 + 0.2 * t + rng.normal(size=25)
        ours, reference = slope_test(t, x), stats.linregress(t, x)
        assert ours.slope == pytest.approx(reference.slope, rel=1e-10)
        assert ours.sigma >= reference.stderr * (1 - 1e-10)
        if ours.sigma == pytest.approx(reference.stderr, rel=1e-9):
            equal += 1
            assert ours.p_value == pytest.approx(reference.pvalue, rel=1e-6)
    assert equal > 80


@pytest.mark.parametrize("phi", [0.0, 0.6])
def test_slope_false_alarms(phi):
    """At 5 %, of 1500 stretches of 120 samples; with correlated noise the plain test would alarm in about a third."""
    rng = np.random.default_rng(6)
    t = np.arange(120.0)
    series = ar1(rng, 120, phi, 1500)
    rate = np.mean([slope_test(t, x).p_value < 0.05 for x in series])
    plain = np.mean([stats.linregress(t, x).pvalue < 0.05 for x in series[:400]])
    assert rate < 0.10
    assert rate > 0.01
    assert plain > 0.25 if phi else plain < 0.09


def test_exact_lines():
    t = np.arange(10.0)
    assert slope_test(t, np.full(10, 5.0)).p_value == 1.0
    line = slope_test(t, 2.0 + 0.5 * t)
    assert line.p_value == 0.0
    assert line.change == pytest.approx(4.5)
    assert slope_test(np.zeros(5), np.arange(5.0)).p_value == 1.0


@pytest.mark.parametrize("phi", [0.0, 0.5, 0.8])
def test_autocorrelation_time(phi):
    """Of first-order autoregressive noise it is (1 + phi)/(1 - phi) (textbook result); median of 40 series."""
    series = ar1(np.random.default_rng(8), 20_000, phi, 40)
    found = np.median([autocorrelation_time(x) for x in series])
    assert found == pytest.approx((1 + phi) / (1 - phi), rel=0.03)


def test_short_and_long_ways_agree():
    x = ar1(np.random.default_rng(9), 257, 0.7)
    centred = x - x.mean()
    rho = np.correlate(centred, centred, "full")[256:] / (centred @ centred)
    pairs = rho[:256].reshape(-1, 2).sum(axis=1)
    count = int(np.argmax(pairs <= 0))
    assert autocorrelation_time(x) == pytest.approx(2 * pairs[:count].sum() - 1, rel=1e-9)


@pytest.mark.parametrize("phi", [0.0, 0.6])
def test_sigma_of_the_mean_covers(phi):
    """Mean +- 2 sigma covers the truth in about 95 % of 1000 stretches of 200 correlated samples."""
    rng = np.random.default_rng(10)
    hits = []
    for x in ar1(rng, 200, phi, 1000):
        mean, sigma, effective = mean_sigma(x)
        hits.append(abs(mean) < 1.96 * sigma)
        assert 1.0 <= effective <= 200.0
    assert 0.90 < np.mean(hits) < 0.98
    naive = np.mean([abs(x.mean()) < 1.96 * x.std(ddof=1) / np.sqrt(200) for x in ar1(rng, 200, phi, 1000)])
    assert naive < 0.75 if phi else naive > 0.92
