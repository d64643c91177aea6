"""Currents of solved power networks as truth: Kirchhoff's law at every bus, losses as published, stated intervals."""

import numpy as np
import pytest
import yaml
from stated_rates import check_alarms, check_intervals, columns

import reconcile

pytestmark = pytest.mark.oracle
pytest.importorskip("pypower", reason="needs the extra [oracles]")


def solved(name):
    """Solved case: buses, branches, generators, base in MVA."""
    import pypower.api as api
    from pypower.ext2int import ext2int

    result, ok = api.runpf(getattr(api, name)(), api.ppoption(VERBOSE=0, OUT_ALL=0))
    assert ok
    inner = ext2int(result)
    return inner["bus"], inner["branch"], inner["gen"], inner["baseMVA"]


def currents(name):
    """Paths and complex currents in per unit: branch ends, what the line takes on its way, generators, loads.

    A branch is a node of its own where it takes or transforms something, else one conductor.
    """
    bus, branch, gen, base = solved(name)
    v = bus[:, 7] * np.exp(1j * np.deg2rad(bus[:, 8]))
    paths, flow = {}, {}

    def put(stream, source, target, current):
        if abs(current) > 1e-12:
            paths[stream], flow[stream] = (source, target), current

    for k, row in enumerate(branch):
        i, j = int(row[0]), int(row[1])
        # terminal powers as solved, in MW and Mvar: currents are the conjugates of S/V
        start = np.conj((row[13] + 1j * row[14]) / base / v[i])
        end = np.conj((row[15] + 1j * row[16]) / base / v[j])
        if abs(start + end) < 1e-9:
            put(f"line{k}", f"bus{i}", f"bus{j}", start)
        else:
            put(f"line{k}a", f"bus{i}", f"line{k}", start)
            put(f"line{k}b", f"line{k}", f"bus{j}", -end)
            put(f"line{k}shunt", f"line{k}", "outside", start + end)
    made = np.zeros(len(bus), dtype=complex)
    for row in gen:
        made[int(row[0])] += row[1] + 1j * row[2]
    for i, row in enumerate(bus):
        put(f"gen{i}", "outside", f"bus{i}", np.conj(made[i] / base / v[i]))
        put(f"load{i}", f"bus{i}", "outside", np.conj((row[2] + 1j * row[3]) / base / v[i]))
        put(f"bank{i}", f"bus{i}", "outside", (row[4] + 1j * row[5]) / base * v[i])
    return paths, np.array(list(flow.values()))


@pytest.mark.parametrize(
    ("name", "megawatts", "buses", "branches"),
    # total active losses of the two IEEE base cases, 13.393 and 132.863 MW (from memory)
    [("case14", 13.393, 14, 20), ("case118", 132.863, 118, 186)],
)
def test_losses_and_currents_of_the_ieee_cases(name, megawatts, buses, branches):
    bus, branch, _, _ = solved(name)
    assert (len(bus), len(branch)) == (buses, branches)
    assert (branch[:, 13] + branch[:, 15]).sum() == pytest.approx(megawatts, abs=1e-3)
    paths, flow = currents(name)
    # the currents, not the powers, add up to zero at every bus: real and imaginary part each
    closure = reconcile.Network.from_paths(paths).incidence @ flow
    assert np.abs(closure).max() < 1e-7


def case_text(paths, sigma):
    return yaml.safe_dump(
        {
            "reconcile": 1,
            "title": "Power network",
            "domains": {"charge": {"unit": "A"}},
            "streams": {n: " -> ".join(path) for n, path in paths.items()},
            "meters": {n: {"reads": f"{n}.current", "unit": "A", "sigma": f"{s!r} A"} for n, s in sigma.items()},
        }
    )


@pytest.mark.parametrize(
    ("name", "part", "seed"), [("case14", "real", 14), ("case14", "imag", 15), ("case30", "real", 30)]
)
def test_true_currents_lie_inside_the_stated_intervals(name, part, seed, write_case):
    paths, flow = currents(name)
    truth = 1000.0 * getattr(flow, part)  # as if one per unit were a kiloampere
    # solved to 1e-8: the last digits are put right, so that the truth closes exactly
    a = reconcile.Network.from_paths(paths).incidence.toarray()
    truth = truth - np.linalg.lstsq(a, a @ truth, rcond=None)[0]
    rng = np.random.default_rng(seed)
    names = list(paths)
    read = [n for n in names if not (n.startswith(("load", "line")) and rng.random() < 0.15)]
    at = [names.index(n) for n in read]
    sigma = 0.01 * np.abs(truth[at]) + 1.0
    case = reconcile.load_case(write_case(case_text(paths, dict(zip(read, sigma.tolist(), strict=True)))))
    readings = truth[at] + rng.normal(size=(400, len(read))) * sigma
    result = case.run({n: readings[:, j] for j, n in enumerate(read)})
    wanted = [n for n in names if np.isfinite(result.sigmas[0, result.variables.index(f"{n}.current")])]
    assert len(wanted) > len(read)
    adjusted, sigmas = columns(result, [f"{n}.current" for n in wanted])
    check_intervals(truth[[names.index(n) for n in wanted]], adjusted, sigmas)
    check_alarms(result.p_value)
