"""Products may leave two answers: the second is looked for, told, and never taken where bounds exclude it.

Figures invented; every answer follows by hand.
"""

import numpy as np
import pytest
from click.testing import CliRunner

from reconcile.adjust.answers import solve_and_check
from reconcile.adjust.solve import Problem, solve
from reconcile.cli import main
from reconcile.errors import PluginError, SolveError
from reconcile.system import System


def snapshot(system, **readings):
    """A problem with these readings, each ``(value, sigma)``."""
    equations = system.equations
    value, sigma = np.array(list(readings.values()), dtype=float).T
    return Problem(
        equations=lambda _: equations,
        sigma=lambda _: sigma,
        columns=np.array([system.column(f"{name}.q") for name in readings]),
        readings=value,
        fixed=np.zeros(0, dtype=np.int64),
        start=system.starts,
        value_dependent=False,
        settle=False,
        lower=system.lower,
        upper=system.upper,
    )


def both(problem):
    return solve_and_check(problem, names=str, row_names=str)


def sum_and_product(**bounds):
    """a + b = total and a b = product: with 5 and 6 read, a and b are 2 and 3, in either order."""
    system = System()
    q = system.variables("q", ["a", "b", "total", "product"], unit="1", **bounds)
    system.require(q["a"] + q["b"] == q["total"], kind="sum")
    system.require(q["a"] * q["b"] == q["product"], kind="product")
    return system


def test_two_roots_are_told_apart():
    solution = both(snapshot(sum_and_product(lower=0), total=(5, 0.1), product=(6, 0.1)))
    assert sorted(solution.x[:2]) == pytest.approx([2, 3], rel=1e-9)
    rival = solution.rival
    assert rival is not None
    assert rival.column in (0, 1)
    assert rival.value == pytest.approx(5 - solution.x[rival.column], rel=1e-9)
    assert rival.objective == pytest.approx(0, abs=1e-20)


def test_a_bound_that_excludes_one_root_leaves_one_answer():
    upper = np.array([2.5, np.inf, np.inf, np.inf])
    solution = both(snapshot(sum_and_product(lower=0, upper=upper), total=(5, 0.1), product=(6, 0.1)))
    assert solution.x[:2] == pytest.approx([2, 3], rel=1e-9)
    assert solution.rival is None


def test_the_square_root_of_either_sign():
    system = System()
    q = system.variables("q", ["side", "area"], unit="1")
    system.require(q["side"] * q["side"] == q["area"], kind="area")
    solution = both(snapshot(system, area=(6, 0.1)))
    assert solution.x[0] == pytest.approx(np.sqrt(6), rel=1e-9)
    assert solution.rival.value == pytest.approx(-np.sqrt(6), rel=1e-9)


def hyperbola(a, b):
    """a b = 4 with both read: minima on either branch."""
    system = System()
    q = system.variables("q", ["a", "b"], unit="1")
    system.require(q["a"] * q["b"] == 4.0, kind="product")
    return snapshot(system, a=(a, 1.0), b=(b, 1.0))


def nearest_on_hyperbola(a, b):
    """The smallest squared distance over a grid so fine that no branch is missed, then over a finer one there."""
    u = np.concatenate([-np.logspace(-3, 3, 400_001), np.logspace(-3, 3, 400_001)])
    best = u[np.argmin((u - a) ** 2 + (4 / u - b) ** 2)]
    u = best * (1 + np.linspace(-1e-4, 1e-4, 200_001))
    return ((u - a) ** 2 + (4 / u - b) ** 2).min()


@pytest.mark.parametrize("a", [-3.0, -0.4, 0.3, 1.5])
@pytest.mark.parametrize("b", [-2.0, -0.1, 0.2, 3.0])
def test_of_two_minima_the_better_one_is_given(a, b):
    solution = both(hyperbola(a, b))
    assert float(solution.parity @ solution.parity) == pytest.approx(nearest_on_hyperbola(a, b), rel=1e-8)


def test_the_better_of_two_answers_counts_whichever_was_found_first(monkeypatch):
    """a = c^2 is read as 4, so c is 2 or -2; b = c - 1.5, read as 0.5, decides: the other leaves (0.5 + 3.5)^2 = 16."""
    system = System()
    q = system.variables("q", ["a", "b", "c"], unit="1")
    system.require(q["c"] * q["c"] == q["a"], kind="square")
    system.require(q["c"] - 1.5 == q["b"], kind="offset")
    problem = snapshot(system, a=(4.0, 0.01), b=(0.5, 1.0))
    assert both(problem).x == pytest.approx([4.0, 0.5, 2.0], rel=1e-9)

    def from_the_wrong_branch(problem, *, start=None, **more):
        return solve(problem, start=np.array([4.0, 0.5, -2.0]) if start is None else start, **more)

    assert from_the_wrong_branch(problem, names=str, row_names=str).x[2] < -1.9
    monkeypatch.setattr("reconcile.adjust.answers.solve", from_the_wrong_branch)
    chosen = both(problem)
    assert chosen.x == pytest.approx([4.0, 0.5, 2.0], rel=1e-9)
    assert chosen.rival.objective == pytest.approx(16, rel=1e-3)


def test_one_answer_has_no_rival_and_linear_balances_are_not_solved_twice(monkeypatch):
    system = System()
    q = system.variables("q", ["flow", "fraction", "component"], unit="1", lower=0)
    system.require(q["flow"] * q["fraction"] == q["component"], kind="component")
    readings = {"flow": (50, 1), "fraction": (0.3, 0.01), "component": (16, 0.5)}
    assert both(snapshot(system, **readings)).rival is None

    calls = []
    monkeypatch.setattr("reconcile.adjust.answers.solve", lambda *a, **k: calls.append(k) or solve(*a, **k))
    both(snapshot(system, **readings))
    assert len(calls) == 2
    linear = System()
    q = linear.variables("q", ["a", "b"], unit="1")
    linear.require(q["a"] == q["b"], kind="flow")
    both(snapshot(linear, a=(1, 0.1), b=(1.1, 0.1)))
    assert len(calls) == 3


def test_a_second_start_that_fails_says_nothing():
    """The logarithm has no value where the second start looks, and the plugin's function raises there."""

    def logarithm(x):
        if np.any(x > 2.5) or np.any(x < 0.5):
            raise ValueError("out of range")
        return np.log(x)

    system = System()
    with system.written_by("narrow"):
        q = system.variables("q", ["a", "b"], unit="1", start=1.0)
        system.require(system.apply(logarithm, q["a"], derivatives=lambda x: [1 / x]) == q["b"], kind="log")
    solution = both(snapshot(system, b=(0.5, 0.01)))
    assert solution.x[0] == pytest.approx(np.exp(0.5), rel=1e-9)
    assert solution.rival is None
    with pytest.raises(
        PluginError, match=r"plugin 'narrow': its function 'logarithm' failed: ValueError: out of range"
    ):
        both(snapshot(system, a=(7.0, 0.01), b=(0.5, 0.01)))


def test_no_answer_names_balance_and_variable():
    system = System()
    q = system.variables("q", ["a", "b"], unit="1")
    system.require(q["a"] * q["a"] + 1.0 == 0, names=["impossible square"], kind="k")
    system.require(q["b"] - q["a"] == 0, names=["harmless"], kind="k")
    with pytest.raises(SolveError) as caught:
        solve(snapshot(system, a=(1, 0.1), b=(1, 0.1)), names=system.name, row_names=lambda i: system.row_names()[i])
    assert caught.value.code == "no-convergence"
    assert "'impossible square'" in str(caught.value)
    assert "a.q" in str(caught.value)


# ---------------------------------------------------------------- from the command line

PLUGIN = """
from reconcile import Domain, hookimpl
class Plates(Domain):
    name = "plates"
    def build(self, network, system, options):
        side = system.variables("side", network.streams, unit="m")
        area = system.variables("area", network.streams, unit="m^2")
        system.require(side * side == area, names=[f"square of {s}" for s in network.streams], kind="area")
@hookimpl
def reconcile_domains():
    return [Plates]
"""
CASE = """
reconcile: 1
title: Square plates (invented)
domains: {plates: {}}
streams: {plate: outside -> yard}
meters:
  A: {reads: plate.area, unit: m^2, sigma: 0.1 m^2}
readings: readings.csv
"""


@pytest.fixture
def run(tmp_path, write_case):
    def run(readings, more="", *words):
        plugin = tmp_path / "plates.py"
        plugin.write_text(PLUGIN)
        case = write_case(CASE + more, readings)
        words = ["run", case, "--plugin", plugin, "--out", tmp_path / "out", *words]
        return CliRunner().invoke(main, [str(w) for w in words], catch_exceptions=False)

    return run


def flat(text):
    return " ".join(text.split())


def test_the_result_says_that_there_are_two_answers(run, tmp_path):
    done = run("A\n4\n")
    assert done.exit_code == 0
    text = flat(done.stdout)
    assert "two answers close the balances: plate.side at 2 m, as given here" in text
    assert "or at -2 m" in text
    assert "two-answers" in (tmp_path / "out" / "summary.json").read_text()


def test_an_expected_value_or_a_bound_chooses_between_them(run):
    assert "plate.side at -2 m, as given here" in flat(run("A\n4\n", "design: {plate.side: -2 m}\n").stdout)
    bounded = run("A\n4\n", "bounds: {plate.side: 0 to 10 m}\n")
    assert bounded.exit_code == 0, bounded.stderr
    assert "two answers" not in flat(bounded.stdout)


def test_without_an_answer_nothing_is_exported(run, tmp_path):
    done = run("A\n-4\n")
    assert done.exit_code == 3
    text = flat(done.stdout)
    assert "balance 'square of plate'" in text
    assert "Most influential: plate." in text
    assert "[nothing-solved]" in done.stderr
    assert not (tmp_path / "out").exists()
    assert "Traceback" not in done.output


def test_one_snapshot_without_an_answer_does_not_stop_the_others(run, tmp_path):
    done = run("A\n4\n-4\n9\n")
    assert done.exit_code == 0
    rows = (tmp_path / "out" / "adjusted.csv").read_text().splitlines()
    assert rows[2] == "2,,"
    assert rows[3].startswith("3,3.0")
    assert "not solved" in (tmp_path / "out" / "evidence.csv").read_text()
    assert "two answers close the balances in 2 of 3 snapshots, the first 1" in flat(done.stdout)


@pytest.mark.parametrize(
    ("body", "code", "words"),
    [
        (
            "raise ValueError('table ends at 300 K')",
            4,
            "plugin 'plates': its function 'law' failed: ValueError: table ends",
        ),
        ("return side[:0]", 4, "plugin 'plates': its function 'law' failed: ValueError"),
        ("return side * float('nan')", 3, "balance 'square of plate' is not a finite number"),
    ],
)
def test_a_function_of_a_domain_that_fails_is_named_and_nothing_is_exported(
    run, tmp_path, monkeypatch, body, code, words
):
    called = PLUGIN.replace("side * side == area", "system.apply(law, side, derivatives=lambda s: [2 * s]) == area")
    monkeypatch.setitem(globals(), "PLUGIN", f"def law(side):\n    {body}\n{called}")
    done = run("A\n4\n")
    assert done.exit_code == code
    assert words in flat(done.stdout + done.stderr)
    assert "Traceback" not in done.stdout + done.stderr
    assert not (tmp_path / "out").exists()
