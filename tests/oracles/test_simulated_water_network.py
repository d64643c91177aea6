"""Flows of simulated water networks as truth: noise is added, and the true flows must lie inside the stated intervals."""

import numpy as np
import pytest
import yaml
from stated_rates import check_alarms, check_intervals, columns

import reconcile

pytestmark = pytest.mark.oracle
wntr = pytest.importorskip("wntr", reason="needs the extra [oracles]")


def simulated(name, hours, folder):
    """Paths of all pipes and demands, and their flows in m3/h, shape (hours, streams), closed to the last digit."""
    model = wntr.network.WaterNetworkModel(name)
    model.options.time.duration = 3600 * (hours - 1)
    found = wntr.sim.EpanetSimulator(model).run_sim(file_prefix=str(folder / "simulated"))
    pipe, demand = 3600.0 * found.link["flowrate"], 3600.0 * found.node["demand"]
    paths = {f"pipe_{n}": (f"at_{p.start_node_name}", f"at_{p.end_node_name}") for n, p in model.links()}
    flow = {f"pipe_{n}": pipe[n].to_numpy(dtype=float) for n, _ in model.links()}
    for n in demand:
        out = sum(flow[f"pipe_{k}"] for k, p in model.links() if p.end_node_name == n)
        out = out - sum(flow[f"pipe_{k}"] for k, p in model.links() if p.start_node_name == n)
        # the simulator prints single precision; its own demands differ from ours by that alone
        assert np.abs(out - demand[n].to_numpy()).max() < 2e-5 * pipe.abs().to_numpy().max()
        if np.abs(demand[n]).max() > 0:
            paths[f"draw_{n}"] = (f"at_{n}", "outside")
            flow[f"draw_{n}"] = out
    return paths, np.array([flow[n] for n in paths]).T


def case_text(paths, sigma):
    return yaml.safe_dump(
        {
            "reconcile": 1,
            "title": "Simulated water network",
            "domains": {"fluid": {"unit": "m3/h"}},
            "streams": {n: " -> ".join(path) for n, path in paths.items()},
            "meters": {n: {"reads": f"{n}.flow", "unit": "m3/h", "sigma": f"{s!r} m3/h"} for n, s in sigma.items()},
        }
    )


@pytest.mark.parametrize(
    ("name", "hours", "repeats", "seed"),
    [("Net1", 24, 20, 8), ("Net2", 24, 20, 10), ("Net3", 12, 40, 9)],
)
def test_true_flows_lie_inside_the_stated_intervals(name, hours, repeats, seed, write_case, tmp_path):
    paths, truth = simulated(name, hours, tmp_path)
    rng = np.random.default_rng(seed)
    names = list(paths)
    size = np.abs(truth).max(axis=0)
    # a fifth of the draws has no meter; what balances do not tell of them must then be said, not guessed
    read = [n for n in names if not (n.startswith("draw_") and rng.random() < 0.2)]
    sigma = {n: float(0.02 * size[names.index(n)] + 0.01 * size.max()) for n in read}
    case = reconcile.load_case(write_case(case_text(paths, sigma)))
    true = np.tile(truth, (repeats, 1))
    spread = np.array([sigma[n] for n in read])
    readings = true[:, [names.index(n) for n in read]] + rng.normal(size=(len(true), len(read))) * spread
    result = case.run({n: readings[:, j] for j, n in enumerate(read)})
    wanted = [n for n in names if np.isfinite(result.sigmas[0, result.variables.index(f"{n}.flow")])]
    assert len(wanted) > len(read)  # some that have no meter are calculated
    adjusted, sigmas = columns(result, [f"{n}.flow" for n in wanted])
    check_intervals(true[:, [names.index(n) for n in wanted]], adjusted, sigmas)
    check_alarms(result.p_value)
    # adjusted flows are closer to the truth than the readings were
    here, there = [names.index(n) for n in read], [wanted.index(n) for n in read]
    after = (adjusted[:, there] - true[:, here]) / spread
    before = (readings - true[:, here]) / spread
    assert np.square(after).mean() < 0.9 * np.square(before).mean()


def test_a_burst_main_is_told_from_a_bad_meter(write_case, tmp_path):
    # 60 m3/h more leave the reservoir and run out at junction 10, where no meter reads anything drawn
    paths, truth = simulated("Net1", 1, tmp_path)
    flow = dict(zip(paths, truth[0], strict=True))
    sigma = {n: float(0.01 * np.abs(truth).max()) for n in paths}
    flow["pipe_9"] += 60.0
    flow["draw_9"] -= 60.0
    s = reconcile.load_case(write_case(case_text(paths, sigma))).run(flow).snapshot(0)
    best = s.accounts.standing[0].alternatives
    assert [(f.candidate.kind, f.candidate.item) for f in best[0].faults] == [("leak", "at_10")]
    assert best[0].faults[0].size == pytest.approx(60.0, rel=1e-3)
    assert len(best) == 1


def test_a_draw_and_a_leak_at_the_same_junction_are_tied(write_case, tmp_path):
    # the same burst at junction 11, whose draw is read: no reading tells a low meter there from a leak
    paths, truth = simulated("Net1", 1, tmp_path)
    flow = dict(zip(paths, truth[0], strict=True))
    sigma = {n: float(0.01 * np.abs(truth).max()) for n in paths}
    for pipe in ("pipe_9", "pipe_10"):
        flow[pipe] += 60.0
    flow["draw_9"] -= 60.0
    s = reconcile.load_case(write_case(case_text(paths, sigma))).run(flow).snapshot(0)
    tied = {(f.candidate.kind, f.candidate.item) for a in s.accounts.standing[0].alternatives for f in a.faults}
    assert {("leak", "at_11"), ("bias", "draw_11")} <= tied
