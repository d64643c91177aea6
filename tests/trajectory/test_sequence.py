"""The windows of a sequence against smoothers of other construction, and against the same system written out whole."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
import yaml
from tank_trains import TAGS, tank_train
from unrolled import solve_unrolled

import reconcile
from reconcile.adjust.sequence import Push, solve_sequence
from reconcile.trajectory_run import _chain, _lengths

NILE = yaml.safe_load((Path(__file__).parent / "nile_local_level.yaml").read_text("utf-8"))
LEVEL = """\
reconcile: 1
title: A slowly varying level, one reading a year
domains:
  fluid: {unit: m3/year, leaks: none}
nodes:
  reach: {stores: true}
streams:
  net: outside -> reach
meters:
  Y: {reads: reach.inventory, unit: m3, sigma: 122.87798826478 m3}
  E: {reads: net.flow, unit: m3/year, sigma: 38.32884030595 m3/year}
trajectory:
  inventories: {reach: m3}
  read_at: start
  step: 1 year
"""


def chain_of(case, readings):
    table = case.read(readings)
    spec = case.parts.spec
    values = np.where(table.usable, table.values, np.nan)[:, [table.columns.index(t) for t in case.tags]]
    lengths, _, _ = _lengths(table, spec.trajectory, spec)
    return _chain(case.model, spec.trajectory, spec, values, lengths)


@pytest.mark.parametrize("read_at", ["start", "end"])
def test_a_local_level_equals_the_published_smoother(write_case, read_at):
    # Durbin & Koopman, local level model of the Nile data; smoothed values from an independent banded solution.
    y = np.array(NILE["series"])
    case = reconcile.load_case(write_case(LEVEL.replace("read_at: start", f"read_at: {read_at}")))
    found = case.run_trajectory(pd.DataFrame({"Y": y, "E": np.zeros(y.size)}))
    level, sigma = found.inventory("reach")
    expected = NILE["expected"]["computed"]
    assert level[:5] == pytest.approx(expected["smoothed_first5"], abs=1e-6)
    assert level[-5:] == pytest.approx(expected["smoothed_last5"], abs=1e-6)
    assert sigma[0] ** 2 == pytest.approx(expected["smoothed_var_first"], abs=1e-6)
    assert sigma[50] ** 2 == pytest.approx(expected["smoothed_var_mid"], abs=1e-6)
    assert found.checks == y.size - 1


def test_a_local_level_equals_a_banded_least_squares_solution(write_case):
    y, eps, eta = np.array(NILE["series"]), 122.87798826478**2, 38.32884030595**2
    n = y.size
    walk = np.diff(np.eye(n), axis=0)
    information = np.eye(n) / eps + walk.T @ walk / eta
    case = reconcile.load_case(write_case(LEVEL))
    level, sigma = case.run_trajectory(pd.DataFrame({"Y": y, "E": np.zeros(n)})).inventory("reach")
    assert level == pytest.approx(np.linalg.solve(information, y / eps), rel=1e-10)
    assert sigma**2 == pytest.approx(np.diag(np.linalg.inv(information)), rel=1e-9)


def smoother(readings, gain, flow_sigma, level_sigma):
    """Forward filter and Rauch-Tung-Striebel smoother of inventories driven by metered flows, diffuse at the start."""
    mixing = gain * np.array([[1.0, -1, 0], [0, 1, -1]])
    process = mixing @ np.diag(flow_sigma**2) @ mixing.T
    noise = np.diag(level_sigma**2)
    means, covers, ahead, ahead_covers = [], [], [], []
    mean, cover = readings[0, 3:], noise
    for t in range(len(readings)):
        if t:
            ahead.append(mean + mixing @ readings[t - 1, :3])
            ahead_covers.append(cover + process)
            weight = ahead_covers[-1] @ np.linalg.inv(ahead_covers[-1] + noise)
            mean = ahead[-1] + weight @ (readings[t, 3:] - ahead[-1])
            cover = (np.eye(2) - weight) @ ahead_covers[-1]
        means.append(mean)
        covers.append(cover)
    for t in range(len(readings) - 2, -1, -1):
        back = covers[t] @ np.linalg.inv(ahead_covers[t])
        means[t] = means[t] + back @ (means[t + 1] - ahead[t])
        covers[t] = covers[t] + back @ (covers[t + 1] - ahead_covers[t]) @ back.T
    return np.array(means), np.array(covers)


def test_a_tank_train_equals_a_kalman_smoother(train):
    _, y = tank_train(120, seed=5)
    case = reconcile.load_case(train())
    found = case.run_trajectory(pd.DataFrame(y, columns=TAGS))
    means, covers = smoother(y, 0.25, np.array([2, 1.5, 2.5]), np.array([1, 1.2]))
    places = [found.variables.index(f"tank_{i}.inventory") for i in (1, 2)]
    assert found.adjusted[:, places] == pytest.approx(means, rel=1e-9)
    for t in (0, 1, 60, 119):
        assert found.covariance(t)[np.ix_(places, places)] == pytest.approx(covers[t], rel=1e-8)


MORE = """\
  LS: {reads: tank_1.inventory + tank_2.inventory, unit: kg, sigma: 2 kg}
  F2b: {reads: mid.flow, unit: kg/h, sigma: 3 kg/h}
"""
CHANGES = {
    "plain": ((), ""),
    "read at the end": ((("read_at: start", "read_at: end"),), ""),
    "in percent": ((("sigma: 2 kg/h", "sigma: 3 % of reading"), ("sigma: 1 kg}", "sigma: [1 % of reading, 0.5 kg]}")), ""),
    "shared and constant errors": (
        (),
        "  constant_errors: {F2: 1 kg/h}\nshared_errors:\n  bench: {sigma: 1 % of reading, meters: [F1, F3]}\n",
    ),
    "a meter on a sum, a second meter, prior knowledge": (
        (("  L2: {", MORE + "  L2: {"),
         ("  out: tank_2 -> outside", "  out: tank_2 -> outside\n  purge: tank_2 -> outside")),
        "known:\n  purge.flow: {value: 1 kg/h, sigma: 0.4 kg/h}\n",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", CHANGES)
def test_a_sequence_equals_the_system_written_out_whole(train, name):
    changes, more = CHANGES[name]
    case = reconcile.load_case(train(*changes, more=more))
    _, y = tank_train(9, seed=11)
    frame = pd.DataFrame(y, columns=TAGS)
    frame["LS"], frame["F2b"] = frame["L1"] + frame["L2"] + 0.7, frame["F2"] - 1.1
    frame = frame[list(case.tags)]
    frame.loc[2, "F2"] = frame.loc[4, "L1"] = frame.loc[5, "F1"] = np.nan
    chain, base = chain_of(case, frame)
    lasting = [(c.reading, c.column) for c in case.model.candidates]
    pushes = tuple(Push(r, c, 0, len(base)) for r, c in lasting)
    got = solve_sequence(chain, base, pushes=pushes, names=str, row_names=str)
    x, spread, determined, parity, signatures = solve_unrolled(chain, base, lasting)
    assert got.determined.all() == determined.all()
    assert got.x == pytest.approx(x, rel=1e-7, abs=1e-7)
    sigma = np.array([np.linalg.norm(c, axis=1) for c in got.covers])
    assert sigma == pytest.approx(spread, rel=1e-6, abs=1e-9)
    assert got.parity.size == parity.size
    assert got.parity @ got.parity == pytest.approx(parity @ parity, rel=1e-7)
    # Both parity vectors are the same up to a rotation, so all products agree.
    assert got.signatures.T @ got.signatures == pytest.approx(signatures.T @ signatures, rel=1e-6, abs=1e-8)
    assert got.signatures.T @ got.parity == pytest.approx(signatures.T @ parity, rel=1e-6, abs=1e-6)


TASTE = """\
reconcile: 1
title: A mixing tank with salt (invented)
domains:
  fluid: {unit: kg/h, leaks: none}
  mixture: {components: [salt]}
nodes:
  tank: {stores: true}
streams:
  brine: outside -> tank
  water: outside -> tank
  product: tank -> outside
meters:
  FB: {reads: brine.flow, unit: kg/h, sigma: 1 kg/h}
  FW: {reads: water.flow, unit: kg/h, sigma: 1 kg/h}
  FP: {reads: product.flow, unit: kg/h, sigma: 2 kg/h}
  CB: {reads: brine.salt, unit: kg/kg, sigma: 0.004 kg/kg}
  CW: {reads: water.salt, unit: kg/kg, sigma: 0.001 kg/kg}
  CP: {reads: product.salt, unit: kg/kg, sigma: 0.002 kg/kg}
  L: {reads: tank.inventory, unit: kg, sigma: 1 kg}
  S: {reads: tank.inventory.salt, unit: kg, sigma: 0.3 kg}
trajectory:
  inventories:
    tank: kg
    tank.inventory.salt: {unit: kg, rate: tank.accumulation.salt}
  read_at: start
  step: 30 min
"""


def test_balances_with_products_equal_the_system_written_out_whole(write_case):
    case = reconcile.load_case(write_case(TASTE))
    rng = np.random.default_rng(2)
    n = 6
    brine, water, product = 40 + 3 * np.sin(np.arange(n)), np.full(n, 60.0), 98 + 2 * np.cos(np.arange(n))
    held, salt = 200 + 0.5 * np.cumsum(brine + water - product), 18 + 0.5 * np.cumsum(0.2 * brine - 0.08 * product)
    columns = [brine, water, product, np.full(n, 0.2), np.full(n, 0.001), np.full(n, 0.08), held, salt]
    sigma = [1, 1, 2, 0.004, 0.001, 0.002, 1, 0.3]
    frame = pd.DataFrame(np.column_stack(columns) + rng.normal(size=(n, 8)) * sigma, columns=list(case.tags))
    chain, base = chain_of(case, frame)
    found = case.run_trajectory(frame)
    x, spread, _, parity, _ = solve_unrolled(chain, base)
    assert found.solution.steps > 2
    assert found.solution.x == pytest.approx(x, rel=1e-6, abs=1e-7)
    assert np.array([np.linalg.norm(c, axis=1) for c in found.solution.covers]) == pytest.approx(
        spread, rel=1e-5, abs=1e-9
    )
    assert found.objective == pytest.approx(parity @ parity, rel=1e-7)


def test_inventories_follow_the_balances_to_rounding(train):
    case = reconcile.load_case(train())
    found = case.run_trajectory(pd.DataFrame(tank_train(200, seed=1)[1], columns=TAGS))
    value = {n: found.adjusted[:, j] for j, n in enumerate(found.variables)}
    off = np.diff(value["tank_1.inventory"]) - 0.25 * (value["feed.flow"] - value["mid.flow"])[:-1]
    assert np.abs(off).max() < 1e-9 * np.abs(value["tank_1.inventory"]).max()


def test_a_long_sequence_covers_the_truth_as_often_as_it_says(train):
    case = reconcile.load_case(train())
    truth, y = tank_train(2000, seed=8)
    found = case.run_trajectory(pd.DataFrame(y, columns=TAGS))
    held = [found.variables.index(f"tank_{i}.inventory") for i in (1, 2)]
    inside = np.abs(found.adjusted[::10][:, held] - truth[::10, 3:]) < 1.959964 * found.sigmas[::10][:, held]
    # 400 nearly independent intervals at 95 %: the central 99.9 % of the binomial lies between 0.912 and 0.982.
    assert 0.912 <= inside.mean() <= 0.982
    assert found.test.p > 0.001
    assert found.checks == 2 * 1999


@pytest.mark.parametrize("read_at", ["start", "end"])
@pytest.mark.parametrize("seed", range(40))
def test_what_is_known_with_many_readings_missing_equals_one_large_system(train, seed, read_at):
    rng = np.random.default_rng(seed)
    _, y = tank_train(9, seed)
    y[rng.random(y.shape) < rng.uniform(0.1, 0.6)] = np.nan
    y[rng.integers(9, size=2)] = np.nan
    case = reconcile.load_case(train(("read_at: start", f"read_at: {read_at}")))
    chain, base = chain_of(case, pd.DataFrame(y, columns=TAGS))
    found = solve_sequence(chain, base, names=str, row_names=str)
    x, spread, determined, parity, _ = solve_unrolled(chain, base)
    assert np.array_equal(found.determined, determined)
    assert found.x[determined] == pytest.approx(x[determined], rel=1e-8, abs=1e-8)
    ours = np.array([np.linalg.norm(c, axis=1) for c in found.covers])
    assert ours[determined] == pytest.approx(spread[determined], rel=1e-7, abs=1e-9)
    assert (found.parity**2).sum() == pytest.approx((parity**2).sum(), rel=1e-7, abs=1e-12)
    assert found.parity.size == parity.size
