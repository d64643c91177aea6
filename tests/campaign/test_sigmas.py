"""Sigmas of single cells: in the kernel, from the scatter of a window, and what they do to false alarms."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

import reconcile
from reconcile.adjust.table import adjust_table
from reconcile.readings import ReadingsTable

TAGS = list("FRDPTB")
TRUTH = np.array([50.0, 150.0, 200.0, 40.0, 160.0, 10.0])


@pytest.fixture
def skid(datasets):
    return reconcile.load_case(datasets / "membrane_skid")


def adjusted(case, values, **sigmas):
    return adjust_table(case.problem(), values, names=case.name_of_column, row_names=case.name_of_row, **sigmas)


def test_sigmas_of_cells_give_what_a_case_with_those_sigmas_gives(skid, datasets, tmp_path):
    rng = np.random.default_rng(31)
    values = TRUTH + rng.normal(size=(6, 6))
    own = np.full((6, 6), np.nan)
    own[2, 1], own[4, 3] = 0.7, 3.0
    more = np.zeros((6, 6))
    more[2, 0] = more[5, 5] = 1.2
    table = adjusted(skid, values, sigmas=own, scatter=more)
    assert table.size == 6
    assert sorted(int(r) for g in table.groups for r in g.rows) == list(range(6))
    law = np.array([0.5, 1.5, 2.0, 0.4, 1.6, 0.2])
    text = (datasets / "membrane_skid" / "case.yaml").read_text()
    for i in range(6):
        sigma = np.where(np.isfinite(own[i]), own[i], np.hypot(law, more[i]))
        changed = text
        for tag, old, new in zip(TAGS, ["0.5", "1.5", "2.0", "0.4", "1.6", "0.2"], sigma, strict=True):
            line = next(line for line in text.splitlines() if line.startswith(f"  {tag}: "))
            changed = changed.replace(line, line.replace(f"sigma: {old} kg/h", f"sigma: {float(new)!r} kg/h"))
        (tmp_path / "case.yaml").write_text(changed)
        other = reconcile.load_case(tmp_path).run(dict(zip(TAGS, values[i], strict=True)))
        group = table.groups[int(table.group_of[i])]
        row = int(np.flatnonzero(group.rows == i)[0])
        np.testing.assert_allclose(group.x[row, :6], other.adjusted[0], rtol=1e-12)
        np.testing.assert_allclose(np.linalg.norm(group.cover[:6], axis=1), other.sigmas[0], rtol=1e-10)
        assert (group.parity[row] ** 2).sum() == pytest.approx(other.objective[0], rel=1e-9)


def test_rows_with_equal_sigmas_share_one_factorisation(skid):
    values = TRUTH + np.random.default_rng(32).normal(size=(50, 6))
    assert len(adjusted(skid, values, scatter=np.full((50, 6), 0.3)).groups) == 1
    # An absent reading's sigma does not keep rows apart.
    values[:, 2] = np.nan
    scatter = np.full((50, 6), 0.3)
    scatter[:, 2] = np.arange(50)
    assert len(adjusted(skid, values, scatter=scatter).groups) == 1


def test_a_result_tells_the_sigma_that_was_used(skid):
    table = ReadingsTable(
        tuple(TAGS),
        np.array([[50.3, 158.6, 201.2, 39.8, 161.0, 10.1]] * 2),
        np.zeros((2, 6), dtype=np.int8),
        sigma=np.array([[np.nan] * 6, [np.nan, 9.0, *[np.nan] * 4]]),
        scatter=np.array([[0.0] * 6, [1.2, *[0.0] * 5]]),
    )
    result = skid.run(table)
    first, second = result.snapshot(0), result.snapshot(1)
    assert [first.reading(t).sigma_before for t in "FR"] == pytest.approx([0.5, 1.5])
    assert [second.reading(t).sigma_before for t in "FR"] == pytest.approx([1.3, 9.0])
    assert result.objective[0] == pytest.approx(15.50, abs=5e-3)
    assert result.words == ("does not agree", "agrees")
    tee = {b.name: b for b in second.balances}["tee flow"]
    assert tee.spread == pytest.approx(np.sqrt(1.3**2 + 9.0**2 + 2.0**2))
    figure = result.figure_values(1)[0]
    assert figure.raw_sigma == pytest.approx(39.8 / 50.3 * np.hypot(0.4 / 39.8, 1.3 / 50.3), rel=1e-9)


def log_of(rng, windows, rows, noise, offset, correlation=0.0):
    """Samples about the truth: an offset a window that does not average, and noise that does."""
    steps = rng.normal(size=(windows, rows, 6))
    for k in range(1, rows):
        steps[:, k] = correlation * steps[:, k - 1] + np.sqrt(1 - correlation**2) * steps[:, k]
    values = TRUTH + offset * rng.normal(size=(windows, 1, 6)) + noise * steps
    stamps = pd.date_range("2025-01-01", periods=windows * rows, freq="1min")
    return pd.DataFrame(values.reshape(-1, 6), columns=TAGS, index=stamps)


@pytest.mark.parametrize("correlation", [0.0, 0.6])
def test_calibration_and_scatter_together_give_honest_alarms(datasets, tmp_path, correlation):
    """1000 windows in which nothing is wrong: a 5 % test alarms in 5 %.

    Binomial: 50 +- 7 of 1000, so 29..71 is three sigmas either way. Leaving either part out would alarm in far more.
    """
    law = np.array([0.5, 1.5, 2.0, 0.4, 1.6, 0.2])
    text = (datasets / "membrane_skid" / "case.yaml").read_text()
    (tmp_path / "case.yaml").write_text(text + "windows: {rows: 120, steady: none}\n")
    case = reconcile.load_case(tmp_path)
    log = log_of(np.random.default_rng(33), 1000, 120, noise=10 * law, offset=law, correlation=correlation)
    result = case.run(log)
    assert result.size == 1000
    alarms = int(result.suspicious.sum())
    assert 29 <= alarms <= 71
    (tmp_path / "case.yaml").write_text(text + "windows: {rows: 120, steady: none, scatter: included}\n")
    without = reconcile.load_case(tmp_path).run(log)
    assert int(without.suspicious.sum()) > 150


def test_stated_noise_takes_the_place_of_the_scatter(datasets, tmp_path):
    text = (datasets / "membrane_skid" / "case.yaml").read_text()
    text = text.replace("sigma: 0.5 kg/h}", "sigma: 0.5 kg/h, reading: {noise: 4 kg/h}}")
    (tmp_path / "case.yaml").write_text(text + "windows: {rows: 25, steady: none}\n")
    result = reconcile.load_case(tmp_path).run(log_of(np.random.default_rng(34), 1, 25, noise=1.0, offset=0.0))
    scatter = result.prepared.table.scatter[0]
    assert 4.0 / 5.0 <= scatter[0] <= 4.0
    # The others: about 1 / sqrt(25) from their own scatter.
    np.testing.assert_allclose(scatter[1:], 0.2, rtol=0.6)


def test_shared_errors_stay_beside_the_scatter(datasets, tmp_path):
    """Two meters with a shared calibration: the shared part is no larger and no smaller than before."""
    text = (datasets / "membrane_skid" / "case.yaml").read_text()
    text += "shared_errors: {reference: {sigma: 1.0 kg/h, meters: [R, D]}}\nwindows: {rows: 25, steady: none}\n"
    (tmp_path / "case.yaml").write_text(text)
    result = reconcile.load_case(tmp_path).run(log_of(np.random.default_rng(35), 1, 25, noise=1.0, offset=0.0))
    model, base = result.model_of(0), result.model.to_base(result.readings)[0]
    r, d = model.tags.index("R"), model.tags.index("D")
    cov = model.covariance_of_readings(base)
    assert cov[r, d] == pytest.approx(1.0)
    scatter = result.prepared.table.scatter[0]
    assert cov[r, r] == pytest.approx(1.5**2 + scatter[1] ** 2 + 1.0)


def test_a_mean_of_one_sample_has_no_scatter_to_show(datasets, tmp_path):
    text = (datasets / "membrane_skid" / "case.yaml").read_text()
    log = log_of(np.random.default_rng(36), 4, 1, noise=0.1, offset=0.0)
    (tmp_path / "case.yaml").write_text(text + "windows: {rows: 1}\n")
    result = reconcile.load_case(tmp_path).run(log)
    told = [n.message for n in result.notices if n.code == "scatter-unknown"]
    assert len(told) == 6
    assert told[0].startswith("F has a single sample in 4 of 4 windows: its scatter is not known there and not counted")
    (tmp_path / "case.yaml").write_text(text + "windows: {rows: 1, scatter: included}\n")
    quiet = reconcile.load_case(tmp_path).run(log)
    assert "scatter-unknown" not in {n.code for n in quiet.notices}
