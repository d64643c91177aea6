"""Every rate that a result states comes true: levels, coverage of intervals, power. Monte Carlo with fixed seeds.

A count of n trials with chance p lies within 4 standard deviations of the binomial law, ``n p +- 4 sqrt(n p (1 - p))``,
but for a chance of 6e-5. The default run has trials enough to notice a level of 5.7 % in place of 5 %; the slow one
has ten times as many. The networks and their figures are invented.
"""

from dataclasses import dataclass

import numpy as np
import pandas as pd
import pytest
from scipy.special import ndtr
from scipy.stats import chi2, kstest

import reconcile
from reconcile.diagnose.critical import smallest_detectable
from reconcile.diagnose.familywise import familywise_limit

TRIALS = 15_000
MANY = 150_000
DEVIATIONS = 4.0

TRUTH = {"feed": 50.0, "recycle": 150.0, "discharge": 200.0, "permeate": 40.0, "retentate": 160.0, "bleed": 10.0}
SKID = """
reconcile: 1
title: Membrane skid (invented)
domains: {fluid: {unit: kg/h}}
streams:
  feed:      outside -> tee
  recycle:   splitter -> tee
  discharge: tee -> module
  permeate:  module -> outside
  retentate: module -> splitter
  bleed:     splitter -> outside
readings: readings.csv
meters:
"""


@dataclass(frozen=True)
class Rig:
    """A case with the streams that its meters read, their sigmas, and what they share."""

    meters: dict[str, tuple[str, float]]
    shared: tuple[tuple[float, tuple[str, ...]], ...] = ()

    def text(self):
        lines = [f"  {m}: {{reads: {s}.flow, unit: kg/h, sigma: {v} kg/h}}" for m, (s, v) in self.meters.items()]
        if self.shared:
            lines.append("shared_errors:")
        for i, (sigma, tags) in enumerate(self.shared):
            lines.append(f"  cause_{i}: {{sigma: {sigma} kg/h, meters: [{', '.join(tags)}]}}")
        return SKID + "\n".join(lines) + "\n"

    def draw(self, rng, trials):
        tags = list(self.meters)
        out = np.array([TRUTH[s] for s, _ in self.meters.values()])
        out = out + np.array([v for _, v in self.meters.values()]) * rng.normal(size=(trials, len(tags)))
        for sigma, members in self.shared:
            out[:, [tags.index(t) for t in members]] += sigma * rng.normal(size=(trials, 1))
        return pd.DataFrame(out, columns=tags)


ALL = {
    "F": ("feed", 0.5), "R": ("recycle", 1.5), "D": ("discharge", 2.0),
    "P": ("permeate", 0.4), "T": ("retentate", 1.6), "B": ("bleed", 0.2),
}  # fmt: skip
RIGS = {
    "all read": Rig(ALL),
    "some not read, one unchecked": Rig({k: ALL[k] for k in ("F", "P", "B", "R")}),
    "two meters on a stream, very unequal": Rig({**ALL, "F2": ("feed", 5.0), "D2": ("discharge", 0.02)}),
    "shared errors": Rig(ALL, ((1.0, ("F", "R", "D")), (0.5, ("P", "B")))),
}


@pytest.fixture
def load(tmp_path):
    def load(rig):
        (tmp_path / "case.yaml").write_text(rig.text())
        return reconcile.load_case(tmp_path)

    return load


def comes_true(hits, chance):
    """Whether a count agrees with the chance stated, see the head of the file."""
    n = hits.size
    off = (hits.sum() - n * chance) / np.sqrt(n * chance * (1 - chance))
    assert abs(off) <= DEVIATIONS, f"{hits.mean():.4f} of {n} where {chance:.4f} is stated: {off:+.1f} deviations"


def truth_of(result):
    return np.array([TRUTH[v.removesuffix(".flow")] for v in result.variables])


def check_level_and_intervals(result):
    """The global test, its p-values, the 95 % intervals of every value, and all values jointly."""
    assert len(result.table.groups) == 1
    checks = int(result.checks[0])
    comes_true(result.suspicious, 0.05)
    comes_true(result.p_value < 0.001, 0.001)
    assert kstest(result.objective, chi2(checks).cdf).pvalue > 1e-4
    truth = truth_of(result)
    known = ~np.isnan(result.sigmas[0])
    assert known.sum() >= 4
    off = (result.adjusted - truth)[:, known] / result.sigmas[:, known]
    for column in off.T:
        comes_true(np.abs(column) <= 1.959964, 0.95)
    covariance = result.covariance(0)[np.ix_(known, known)]
    unit = covariance / np.outer(result.sigmas[0, known], result.sigmas[0, known])
    value, vector = np.linalg.eigh(unit)
    free = value > 1e-9
    distance = (((off @ vector[:, free]) ** 2) / value[free]).sum(axis=1)
    assert kstest(distance, chi2(int(free.sum())).cdf).pvalue > 1e-4
    # Adjusted values and evidence are independent of one another: no information is used twice.
    correlation = np.corrcoef(np.column_stack([off, result.table.groups[0].parity]).T)[: off.shape[1], off.shape[1] :]
    assert np.abs(correlation).max() <= 5 / np.sqrt(len(off))


@pytest.mark.parametrize("name", RIGS)
def test_levels_and_intervals(load, name):
    rig = RIGS[name]
    check_level_and_intervals(load(rig).run(rig.draw(np.random.default_rng(11), TRIALS)))


@pytest.mark.slow
@pytest.mark.parametrize("name", RIGS)
def test_levels_and_intervals_in_many_trials(load, name):
    rig = RIGS[name]
    check_level_and_intervals(load(rig).run(rig.draw(np.random.default_rng(12), MANY)))


def meter_tests(result):
    """z of every meter that is checked, shape (N, number checked), and the limit for the largest of them."""
    group = result.table.groups[0]
    meters = np.flatnonzero(group.checked)
    f = group.signatures[:, meters]
    z = group.parity @ f / np.linalg.norm(f, axis=0)
    return meters, np.linalg.norm(f, axis=0), z, familywise_limit(f, 0.05).limit


def check_familywise(result):
    _, _, z, limit = meter_tests(result)
    comes_true(np.abs(z).max(axis=1) > limit, 0.05)
    for column in z.T:
        comes_true(np.abs(column) > 1.959964, 0.05)


@pytest.mark.parametrize("name", RIGS)
def test_one_in_twenty_sound_snapshots_accuses_a_meter(load, name):
    rig = RIGS[name]
    check_familywise(load(rig).run(rig.draw(np.random.default_rng(21), TRIALS)))


@pytest.mark.slow
@pytest.mark.parametrize("name", RIGS)
def test_one_in_twenty_of_many_sound_snapshots_accuses_a_meter(load, name):
    rig = RIGS[name]
    check_familywise(load(rig).run(rig.draw(np.random.default_rng(22), MANY)))


def check_power(load, name, trials, seed):
    rig = RIGS[name]
    case = load(rig)
    rng = np.random.default_rng(seed)
    coverage = {line.name: line for line in case.coverage.lines}
    settings = case.parts.spec.settings
    tried = 0
    for tag in rig.meters:
        line = coverage[tag]
        if not np.isfinite(line.smallest):
            continue
        readings = rig.draw(rng, trials)
        readings[tag] += line.smallest
        result = case.run(readings)
        meters, lengths, z, _ = meter_tests(result)
        own = list(meters).index(result.tags.index(tag))
        assert line.smallest == pytest.approx(smallest_detectable(lengths[own], 0.05, settings.power), rel=1e-9)
        comes_true(np.abs(z[:, own]) > 1.959964, settings.power)
        # The estimate of the size: unbiased, and as uncertain as stated.
        size = z[:, own] / lengths[own]
        comes_true(np.abs(size - line.smallest) * lengths[own] <= 1.959964, 0.95)
        # The test of all readings together, against the noncentral law.
        assert np.mean(result.suspicious) < settings.power + 0.02
        # Among all faults, at the size stated for that.
        readings[tag] += line.smallest_of_all - line.smallest
        _, _, z, limit = meter_tests(case.run(readings))
        shift = line.smallest_of_all * lengths[own]
        comes_true(np.abs(z[:, own]) > limit, float(ndtr(shift - limit) + ndtr(-shift - limit)))
        tried += 1
    return tried


@pytest.mark.parametrize(
    ("name", "tried"), [("all read", 6), ("some not read, one unchecked", 3), ("shared errors", 6)]
)
def test_a_fault_of_the_smallest_detectable_size_is_found_as_often_as_stated(load, name, tried):
    assert check_power(load, name, TRIALS // 3, 31) == tried


@pytest.mark.slow
@pytest.mark.parametrize("name", RIGS)
def test_the_smallest_detectable_size_in_many_trials(load, name):
    assert check_power(load, name, MANY // 3, 32) >= 3


@pytest.mark.parametrize("share", [0.1, 0.35])
def test_intervals_and_levels_where_readings_are_missing(load, share):
    """Missing at random, dozens of patterns in one table; the number of checks then differs from row to row."""
    rig = RIGS["all read"]
    rng = np.random.default_rng(41)
    readings = rig.draw(rng, TRIALS)
    readings = readings.mask(rng.random(readings.shape) < share)
    readings = readings[readings.notna().any(axis=1)].reset_index(drop=True)
    result = load(rig).run(readings)
    assert len(result.table.groups) > 20
    tested = result.checks > 0
    assert set(result.checks) >= {0, 1, 2, 3}
    comes_true(result.suspicious[tested], 0.05)
    assert not result.suspicious[~tested].any()
    for checks in (1, 2, 3):
        assert kstest(result.objective[result.checks == checks], chi2(checks).cdf).pvalue > 1e-4
    off = (result.adjusted - truth_of(result)) / result.sigmas
    for column in off.T:
        comes_true(np.abs(column[np.isfinite(column)]) <= 1.959964, 0.95)
    # A value is given if and only if its sigma is.
    np.testing.assert_array_equal(np.isnan(result.adjusted), np.isnan(result.sigmas))


ORE = {"feed.flow": (100.0, 1.0), "conc.flow": (10.0, 0.2), "tail.flow": (90.0, None), "feed.Cu": (2.18, 0.02),
       "conc.Cu": (20.0, 0.2), "tail.Cu": (0.2, 0.01), "feed.Zn": (2.2, 0.03), "conc.Zn": (4.0, 0.1),
       "tail.Zn": (2.0, 0.03)}  # fmt: skip
SEPARATION = """
reconcile: 1
title: Two-product separation of an ore (invented)
domains: {mixture: {unit: t/h, components: {Cu: "%", Zn: "%"}}}
streams: {feed: outside -> cell, conc: cell -> outside, tail: cell -> outside}
readings: readings.csv
meters:
"""


def check_products(tmp_path, trials, seed):
    """With sigmas of a few per cent products are nearly straight, and the rates of the linear theory hold."""
    read = {name: entry for name, entry in ORE.items() if entry[1] is not None}
    lines = [
        f"  {name.replace('.', '_')}: {{reads: {name}, unit: t/h, sigma: {sigma} t/h}}\n"
        if name.endswith("flow")
        else f"  {name.replace('.', '_')}: {{reads: {name}, unit: '%', sigma: {sigma} % absolute}}\n"
        for name, (_, sigma) in read.items()
    ]
    (tmp_path / "case.yaml").write_text(SEPARATION + "".join(lines))
    case = reconcile.load_case(tmp_path)
    value, sigma = np.array(list(read.values())).T
    readings = value + sigma * np.random.default_rng(seed).normal(size=(trials, value.size))
    result = case.run(pd.DataFrame(readings, columns=list(case.tags)))
    assert not result.table.failed
    assert not any(g.rival for g in result.table.groups)
    assert set(result.checks) == {2}
    comes_true(result.suspicious, 0.05)
    assert kstest(result.objective, chi2(2).cdf).pvalue > 1e-3
    for name, (truth, _) in ORE.items():
        column = result.variables.index(name)
        comes_true(np.abs((result.adjusted - truth) / result.sigmas)[:, column] <= 1.959964, 0.95)


def test_products_keep_the_rates(tmp_path):
    check_products(tmp_path, 300, 51)


@pytest.mark.slow
def test_products_keep_the_rates_in_many_trials(tmp_path):
    check_products(tmp_path, 4000, 52)
