"""Systems of balances: names, kinds, writers, bounds, constants, priors, faults; what is refused."""

import numpy as np
import pytest

from reconcile.system import System


@pytest.fixture
def system():
    """Two domains, the second reading the first one's variables; figures invented."""
    system = System()
    with system.written_by("fluid"):
        flow = system.variables("flow", ["feed", "light", "heavy"], unit="kg/h", lower=0, start=[10, 4, np.nan])
        leak = system.faults("leak", ["column"], unit="kg/h", says="{size} {unit} lost at {item}", lower=0, rate=0.01)
        system.require(
            flow["feed"] - flow["light"] - flow["heavy"] - leak == 0, names=["column flow"], kind="mass", unit="kg/h",
            nodes=["column"],
        )  # fmt: skip
    with system.written_by("mixture"):
        fraction = system.variables("salt", ["feed", "light", "heavy"], unit="1", lower=0, upper=[1, 1, 0.5])
        flow = system.find("flow", ["feed", "light", "heavy"])
        out = flow[["light", "heavy"]] * fraction[["light", "heavy"]]
        system.require(flow["feed"] * fraction["feed"] == out.sum(), kind="salt")
        system.require(fraction["light"] == 0, kind="purity")
    return system


def test_names_units_and_writers(system):
    assert system.size == 7
    assert system.names() == [
        "feed.flow", "light.flow", "heavy.flow", "column.leak", "feed.salt", "light.salt", "heavy.salt",
    ]  # fmt: skip
    assert [system.name(i) for i in range(7)] == system.names()
    assert [system.column(n) for n in system.names()] == list(range(7))
    assert [system.block_of(i).writer for i in (0, 3, 4)] == ["fluid", "fluid", "mixture"]
    assert system.unit(3) == "kg/h"
    assert "column.leak" not in system.units()
    assert system.units()["heavy.salt"] == "1"
    assert system.block_of(3).fault.rate == 0.01
    assert system.block_of(0).fault is None


def test_rows_remember_who_wrote_them(system):
    assert system.row_names() == ["column flow", "salt 1", "purity 1"]
    rows = [system.rows_of(i) for i in range(3)]
    assert [r.writer for r in rows] == ["fluid", "mixture", "mixture"]
    assert [r.kind for r in rows] == ["mass", "salt", "purity"]
    assert [r.nodes for r in rows] == [("column",), ("salt 1",), ("purity 1",)]
    assert [(r.start, r.stop) for r in rows] == [(0, 1), (1, 2), (2, 3)]
    assert rows[0].unit == "kg/h"


def test_bounds_and_starts(system):
    np.testing.assert_array_equal(system.lower, np.zeros(7))
    np.testing.assert_array_equal(system.upper, [np.inf] * 4 + [1, 1, 0.5])
    np.testing.assert_array_equal(system.starts, [10, 4, np.nan, 0, np.nan, np.nan, np.nan])


def test_equations(system):
    equations = system.equations
    assert equations.shape == (3, 7)
    assert not equations.is_linear
    x = np.array([10.0, 4.0, 5.5, 0.25, 0.1, 0.02, 0.15])
    np.testing.assert_allclose(equations.closure(x), [0.25, 1 - 0.08 - 0.825, 0.02], rtol=1e-12)
    np.testing.assert_allclose(equations.largest_term(x), [10, 1, 0.02], rtol=1e-12)
    assert system.equations is equations


def test_balances_added_later_are_seen(system):
    before = system.equations.shape
    late = system.variables("flow", ["purge"], unit="kg/h")
    system.require(late == 1.0, kind="given")
    assert system.equations.shape == (before[0] + 1, before[1] + 1)
    np.testing.assert_allclose(system.equations.rhs, [0, 0, 0, 1])


def test_an_empty_system_has_no_rows():
    system = System()
    assert system.equations.shape == (0, 0)
    system.variables("flow", ["a"], unit="1")
    assert system.row_names() == []
    assert system.lower.shape == (1,)


def test_equal_products_and_terms_are_merged_and_zeros_dropped():
    system = System()
    q = system.variables("q", ["a", "b"], unit="1")
    system.require(q["a"] * q["b"] + 2 * (q["b"] * q["a"]) + q["a"] - q["a"] == 0, kind="k")
    equations = system.equations
    assert equations.products.nnz == 1
    assert equations.products.toarray().tolist() == [[3.0]]
    assert equations.linear.nnz == 0
    system.require(q["a"] * q["b"] - q["a"] * q["b"] == 0, kind="nothing")
    assert system.equations.products.nnz == 1


def test_find_gives_what_others_declared(system):
    assert system.find("flow").items == ("feed", "light", "heavy")
    assert system.find("flow", ["heavy"]).items == ("heavy",)
    assert system.find("pressure") is None
    assert system.find("flow", ["feed", "nowhere"]) is None
    assert system.find("flow", []) is None


def test_constants_and_prior_knowledge(system):
    flow = system.find("flow")
    system.fix(flow[["heavy", "feed"]], [5.0, 10.0])
    assert system.fixed == {2: 5.0, 0: 10.0}
    system.prior(flow["light"], 4.0, 0.5, origin="design")
    prior = system.priors[0]
    assert (prior.columns.tolist(), prior.values.tolist(), prior.sigmas.tolist()) == ([1], [4.0], [0.5])
    assert prior.origin == "design"
    for wrong in (flow.sum(), 2 * flow, flow + 1, flow["feed"] * flow["light"]):
        with pytest.raises(ValueError, match="only single variables"):
            system.fix(wrong, 1.0)
    for sigma in (0.0, -1.0, np.nan):
        with pytest.raises(ValueError, match="sigma above zero"):
            system.prior(flow["light"], 4.0, sigma, origin="design")


REFUSED = {
    "twice in one block": (
        lambda s: s.variables("flow", ["x", "y", "x"], unit="kg/h"), ValueError, "x.flow is declared twice",
    ),
    "written by two": (
        lambda s: s.variables("salt", ["feed"], unit="1"), ValueError, "feed.salt is written by both 'mixture' and ''",
    ),
    "a fault of that name": (
        lambda s: s.faults("flow", ["feed"], unit="1", says=""), ValueError, "feed.flow is written by both 'fluid'",
    ),
    "too few names": (
        lambda s: s.require(s.find("flow") == 0, names=["one"], kind="k"), ValueError, "3 balances need 3 names",
    ),
    "too many nodes": (
        lambda s: s.require(s.find("flow") == 0, nodes=list("abcd"), kind="k"), ValueError, "got 3 and 4",
    ),
    "no comparison": (lambda s: s.require(s.find("flow"), kind="k"), TypeError, "takes a comparison"),
    "plain truth": (lambda s: s.require(True, kind="k"), TypeError, "takes a comparison"),
    "foreign": (
        lambda s: s.require(System().variables("q", ["a"], unit="1") == 0, kind="k"), ValueError, "another system",
    ),
    "unknown name": (lambda s: s.column("feed.pressure"), KeyError, "pressure"),
}  # fmt: skip


@pytest.mark.parametrize("name", REFUSED)
def test_what_makes_no_sense_is_refused(system, name):
    call, kind, words = REFUSED[name]
    with pytest.raises(kind) as caught:
        call(system)
    assert words in str(caught.value)


def test_a_refused_block_leaves_the_system_as_it_was(system):
    names, rows = system.names(), system.row_names()
    for name in REFUSED:
        with pytest.raises(REFUSED[name][1]):
            REFUSED[name][0](system)
    assert system.names() == names
    assert system.row_names() == rows
    assert system.equations.shape == (3, 7)


def test_the_writer_is_restored_after_an_error():
    system = System()
    with pytest.raises(RuntimeError), system.written_by("broken"):
        raise RuntimeError
    system.variables("flow", ["a"], unit="1")
    assert system.block_of(0).writer == ""


def test_items_and_quantities_with_dots():
    system = System()
    system.variables("oxygen.fraction", ["offgas"], unit="1")
    assert system.column("offgas.oxygen.fraction") == 0
    assert system.name(0) == "offgas.oxygen.fraction"
