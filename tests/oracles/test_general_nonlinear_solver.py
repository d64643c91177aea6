"""The adjusted values of bilinear cases are the optimum that general nonlinear solvers of scipy find.

The general solver gets the objective, the balances and their derivatives written by hand here, not the program's.
"""

from pathlib import Path

import numpy as np
import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import NonlinearConstraint, least_squares, minimize

import reconcile

COMPONENTS = ("A", "B")


class Circuit:
    """Separators in a row with recycles: flows and mass fractions, everything in one vector (flows, A, B)."""

    def __init__(self, seed):
        rng = np.random.default_rng(seed)
        self.rng = rng
        nodes = int(rng.integers(1, 4))
        self.paths = {"feed": ("outside", "u0")}
        for k in range(nodes):
            self.paths[f"down{k}"] = (f"u{k}", f"u{k + 1}" if k + 1 < nodes else "outside")
            back = rng.random() < 0.5 and k > 0
            self.paths[f"side{k}"] = (f"u{k}", f"u{int(rng.integers(0, k))}" if back else "outside")
        self.incidence = reconcile.Network.from_paths(self.paths).incidence.toarray()
        # parts are split at every node: amounts of A, B and the rest follow from one linear system each
        total = np.zeros(len(self.paths))
        parts = []
        names = list(self.paths)
        for share in (0.15, 0.3, 0.55):
            a = self.incidence.copy()
            rows, right = [a], [np.zeros(nodes)]
            for k in range(nodes):
                split = rng.uniform(0.2, 0.8)
                row = np.zeros(len(names))
                row[names.index(f"down{k}")], row[names.index(f"side{k}")] = 1 - split, -split
                rows.append(row[None])
                right.append([0.0])
            feed = np.zeros(len(names))
            feed[0] = 1.0
            amounts = np.linalg.solve(np.vstack([*rows, feed[None]]), np.concatenate([*right, [100.0 * share]]))
            parts.append(amounts)
            total = total + amounts
        self.truth = np.concatenate([total, *(p / total for p in parts[:2])])
        n = len(names)
        self.names = [f"{s}.{q}" for q in ("flow", *COMPONENTS) for s in names]
        self.sigma = np.concatenate(
            [0.02 * total, 0.02 * self.truth[n : 2 * n] + 1e-3, 0.02 * self.truth[2 * n :] + 1e-3]
        )
        read = rng.random(3 * n) < 0.85
        read[0] = True  # some flow has to be known
        self.read = np.flatnonzero(read)
        self.readings = self.truth[self.read] + rng.normal(size=self.read.size) * self.sigma[self.read]

    def balances(self, v):
        f, a, b = np.split(v, 3)
        return np.concatenate([self.incidence @ f, self.incidence @ (f * a), self.incidence @ (f * b)])

    def slopes(self, v):
        f, a, b = np.split(v, 3)
        m, zero = self.incidence, np.zeros_like(self.incidence)
        return np.block([[m, zero, zero], [m * a, m * f, zero], [m * b, zero, m * f]])

    def case(self, folder):
        unit = {"flow": "kg/h", "A": "fraction", "B": "fraction"}
        text = {
            "reconcile": 1,
            "title": "Separators with recycles (invented)",
            "domains": {"mixture": {"unit": "kg/h", "components": dict.fromkeys(COMPONENTS, "fraction")}},
            "streams": {s: " -> ".join(path) for s, path in self.paths.items()},
            "meters": {
                self.names[j]: {
                    "reads": self.names[j],
                    "unit": unit[self.names[j].split(".")[1]],
                    "sigma": f"{float(self.sigma[j])!r} {unit[self.names[j].split('.')[1]]}",
                }
                for j in self.read
            },
        }
        path = folder / "case.yaml"
        path.write_text(yaml.safe_dump(text), encoding="utf-8")
        return reconcile.load_case(path)

    def general(self, method):
        """Optimum in units of sigma around the truth, so that the solver sees numbers near one."""
        scale, center = self.sigma, self.truth
        y = (self.readings - center[self.read]) / scale[self.read]
        size = np.concatenate([np.full(len(self.incidence), 100.0), np.full(2 * len(self.incidence), 10.0)])

        def cost(u):
            return 0.5 * float(np.square(u[self.read] - y).sum())

        def slope(u):
            out = np.zeros_like(u)
            out[self.read] = u[self.read] - y
            return out

        def closure(u):
            return self.balances(center + scale * u) / size

        def jacobian(u):
            return self.slopes(center + scale * u) * scale / size[:, None]

        start = np.zeros(center.size)
        if method == "SLSQP":
            given = {"type": "eq", "fun": closure, "jac": jacobian}
            options = {"maxiter": 500, "ftol": 1e-15}
            found = minimize(cost, start, jac=slope, constraints=given, method=method, options=options)
        else:
            given = NonlinearConstraint(closure, 0.0, 0.0, jac=jacobian)
            options = {"maxiter": 3000, "gtol": 1e-10, "xtol": 1e-14}
            hess = np.zeros(center.size)
            hess[self.read] = 1.0
            found = minimize(
                cost, start, jac=slope, hess=lambda _: np.diag(hess), constraints=given, method=method, options=options
            )
        assert np.abs(closure(found.x)).max() < 1e-8
        return 2.0 * found.fun, center + scale * found.x


def compare(circuit, folder, method, rel):
    result = circuit.case(folder).run(
        {circuit.names[j]: v for j, v in zip(circuit.read, circuit.readings, strict=True)}
    )
    objective, v = circuit.general(method)
    assert result.objective[0] == pytest.approx(objective, rel=rel, abs=1e-8)
    at = {name: j for j, name in enumerate(result.variables)}
    ours = np.array([result.adjusted[0, at[name]] for name in circuit.names])
    known = np.array([np.isfinite(result.sigmas[0, at[name]]) for name in circuit.names])
    assert known.sum() >= circuit.read.size
    assert np.abs((ours - v) / circuit.sigma)[known].max() < 1e3 * rel


@given(seed=st.integers(0, 10**6))
def test_random_circuits(seed, tmp_path_factory):
    compare(Circuit(seed), tmp_path_factory.mktemp("circuit"), "SLSQP", 1e-6)


@pytest.mark.parametrize("seed", range(6))
def test_a_second_general_solver(seed, tmp_path):
    compare(Circuit(seed), tmp_path, "trust-constr", 1e-6)


def test_the_circuits_have_something_to_check():
    sizes = [len(Circuit(seed).read) - _directions(Circuit(seed)) for seed in range(40)]
    assert np.mean(np.array(sizes) > 0) > 0.8


def _directions(circuit):
    """Independent directions in which balances leave the readings free, at the truth."""
    null = np.linalg.svd(circuit.slopes(circuit.truth))[2][np.linalg.matrix_rank(circuit.slopes(circuit.truth)) :]
    return np.linalg.matrix_rank(null[:, circuit.read])


# ------------------------------------------------------------------ published cases

# The figures under "computed" are what this program is held to in tests/published; here a general solver finds them.


def published(name):
    path = Path(__file__).parents[1] / "published" / "cases" / f"{name}.yaml"
    return yaml.safe_load(path.read_text(encoding="utf-8"))


@pytest.mark.parametrize("variant", ["A", "B"])
def test_distillation_column(variant):
    raw = published("distillation_bilinear")
    y, sigma = np.array(list(raw["readings"].values())).T  # flow, x1, x2 of F1, F2, F3
    sign = np.array([1.0, -1.0, -1.0])

    def closure(v):
        f, a, b = v.reshape(3, 3).T
        parts = [sign @ (f * a), sign @ (f * b)]
        return np.array([*parts, sign @ f] if variant == "A" else [*parts, *(400.0 * (a + b - 1.0))])

    def jacobian(v):
        f, a, b = v.reshape(3, 3).T
        out = np.zeros((3 if variant == "A" else 5, 3, 3))
        out[0, :, 0], out[0, :, 1] = sign * a, sign * f
        out[1, :, 0], out[1, :, 2] = sign * b, sign * f
        if variant == "A":
            out[2, :, 0] = sign
        else:
            for k in range(3):
                out[2 + k, k, 1:] = 400.0
        return out.reshape(len(out), 9)

    found = minimize(
        lambda u: 0.5 * float(u @ u),
        np.zeros(9),
        jac=lambda u: u,
        constraints={
            "type": "eq",
            "fun": lambda u: closure(y + sigma * u) / 100.0,
            "jac": lambda u: jacobian(y + sigma * u) * sigma / 100.0,
        },
        method="SLSQP",
        options={"maxiter": 500, "ftol": 1e-15},
    )
    want = raw["computed"][variant]
    assert 2.0 * found.fun == pytest.approx(want["objective"], rel=1e-8)
    assert y + sigma * found.x == pytest.approx(list(want["adjusted"].values()), rel=1e-6)


def test_three_bus_network():
    raw = published("abur_exposito_3bus_ac")
    y, sigma = np.array(list(raw["readings"].values())).T
    line = {ends: 1.0 / complex(*z) for ends, z in raw["branches"].items()}

    def predicted(state):
        u = np.exp(1j * np.array([0.0, *state[3:]])) * state[:3]

        def sent(i, j):
            return u[i] * np.conj((u[i] - u[j]) * line[f"{min(i, j) + 1}-{max(i, j) + 1}"])

        s12, s13, s2 = sent(0, 1), sent(0, 2), sent(1, 0) + sent(1, 2)
        return np.array([s12.real, s13.real, s2.real, s12.imag, s13.imag, s2.imag, *state[:2]])

    found = least_squares(
        lambda x: (predicted(x) - y) / sigma, [1.0, 1.0, 1.0, 0.0, 0.0], method="lm", xtol=1e-15, ftol=1e-15
    )
    want = raw["computed"]
    assert 2.0 * found.cost == pytest.approx(want["objective"], rel=1e-8)
    assert found.x[:3] == pytest.approx(want["voltage"], abs=1e-8)
    assert np.degrees(found.x[3:]) == pytest.approx(want["angle_degrees"][1:], abs=1e-7)
