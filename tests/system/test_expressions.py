"""Vector expressions: every operation against numpy on the same numbers, derivatives against differences."""

import numpy as np
import pytest
import scipy.sparse as sp
from hypothesis import given
from hypothesis import strategies as st

from reconcile.errors import PluginError
from reconcile.system import System, stack

ITEMS = ("a", "b", "c")


@pytest.fixture
def system():
    return System()


@pytest.fixture
def v(system):
    return system.variables("q", ITEMS, unit="1")


X = np.array([2.0, -3.0, 5.0])


def value(expression, x=X):
    """Values of an expression, through the equations that it becomes."""
    rows = expression.system.require(expression == 0, kind="k")
    return expression.system.equations.closure(np.asarray(x, dtype=float))[rows.start : rows.stop]


ROW = np.array([1.0, 2.0, 3.0])
CASES = {
    "plus": (lambda v: v + v, lambda x: x + x),
    "plus number": (lambda v: v + 2, lambda x: x + 2),
    "number plus": (lambda v: 2 + v, lambda x: x + 2),
    "plus array": (lambda v: v + ROW, lambda x: x + ROW),
    "array plus": (lambda v: ROW + v, lambda x: x + ROW),
    "plus list": (lambda v: v + ROW.tolist(), lambda x: x + ROW),
    "minus": (lambda v: v - 3 * v, lambda x: -2 * x),
    "number minus": (lambda v: 1 - v, lambda x: 1 - x),
    "array minus": (lambda v: ROW - v, lambda x: ROW - x),
    "negative": (lambda v: -v, lambda x: -x),
    "times number": (lambda v: v * 2.5, lambda x: 2.5 * x),
    "array times": (lambda v: ROW * v, lambda x: x * ROW),
    "one entry times array": (lambda v: v["a"] * ROW, lambda x: x[0] * ROW),
    "one entry plus block": (lambda v: v["a"] + v, lambda x: x[0] + x),
    "block minus one entry": (lambda v: v - v["b"], lambda x: x - x[1]),
    "divided by number": (lambda v: v / 4, lambda x: x / 4),
    "divided by array": (lambda v: v / np.array([1, 2, 4]), lambda x: x / [1, 2, 4]),
    "matrix": (lambda v: np.arange(6).reshape(2, 3) @ v, lambda x: np.arange(6).reshape(2, 3) @ x),
    "vector matrix": (lambda v: ROW @ v, lambda x: [ROW @ x]),
    "sparse matrix": (lambda v: sp.csr_array(np.eye(3)[[2, 0]]) @ v, lambda x: x[[2, 0]]),
    "old sparse matrix": (lambda v: sp.coo_matrix(np.eye(3)[[2, 0]]) @ v, lambda x: x[[2, 0]]),
    "position": (lambda v: v[1], lambda x: x[[1]]),
    "last": (lambda v: v[-1], lambda x: x[[2]]),
    "slice": (lambda v: v[::2], lambda x: x[::2]),
    "positions": (lambda v: v[[2, 0, 2]], lambda x: x[[2, 0, 2]]),
    "mask": (lambda v: v[np.array([True, False, True])], lambda x: x[[0, 2]]),
    "name": (lambda v: v["b"], lambda x: x[[1]]),
    "names": (lambda v: v[["c", "a"]], lambda x: x[[2, 0]]),
    "names of a part": (lambda v: v[["c", "a"]]["a"], lambda x: x[[0]]),
    "sum": (lambda v: v.sum(), lambda x: [x.sum()]),
    "stack": (lambda v: stack([v, v.sum(), 2 * v[:1]]), lambda x: np.concatenate([x, [x.sum()], 2 * x[:1]])),
    "product": (lambda v: v * v[::-1], lambda x: x * x[::-1]),
    "square": (lambda v: v * v, lambda x: x**2),
    "one entry times block": (lambda v: v["a"] * v, lambda x: x[0] * x),
    "product of sums": (
        lambda v: (v["a"] + v["b"] - 1) * (2 * v["c"] + v["a"] + 3),
        lambda x: [(x[0] + x[1] - 1) * (2 * x[2] + x[0] + 3)],
    ),
    "matrix of products": (
        lambda v: np.array([[1, -1, 2]]) @ (v * v) + v.sum() - 7,
        lambda x: [x[0] ** 2 - x[1] ** 2 + 2 * x[2] ** 2 + x.sum() - 7],
    ),
    "products in a stack": (
        lambda v: stack([v * v["a"], v[:2], (v * v).sum()]),
        lambda x: np.concatenate([x * x[0], x[:2], [(x**2).sum()]]),
    ),
    "index of products": (lambda v: (v * v + v)[[2, 0]], lambda x: (x**2 + x)[[2, 0]]),
    "products scaled": (lambda v: -((v * v) / 2) * ROW, lambda x: -(x**2) / 2 * ROW),
}


@pytest.mark.parametrize("name", CASES)
def test_operations(v, name):
    build, numpy = CASES[name]
    np.testing.assert_allclose(value(build(v)), numpy(X), rtol=1e-15)


def test_function_calls_join_every_operation(system, v):
    call = system.apply(lambda p, q: p**2 * q, 2 * v + 1, v[::-1], derivatives=lambda p, q: [2 * p * q, p**2])
    f = (2 * X + 1) ** 2 * X[::-1]
    np.testing.assert_allclose(value(call), f)
    np.testing.assert_allclose(
        value(stack([v, 3 * call[[2, 0]], call.sum() - v["a"]])), [*X, *3 * f[[2, 0]], f.sum() - X[0]]
    )
    np.testing.assert_allclose(value(np.array([[1, 0, -1]]) @ call + v["b"] * v["c"]), [f[0] - f[2] + X[1] * X[2]])


# ---------------------------------------------------------------- derivatives and random expressions


@st.composite
def expressions(draw):
    """(system, expression, the same as a function of x), from operations drawn one after the other."""
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    system = System()
    n = draw(st.integers(1, 5))
    v = system.variables("q", [f"s{i}" for i in range(n)], unit="1")
    late = draw(st.integers(0, 2))
    more = system.variables("r", [f"t{i}" for i in range(late + 1)], unit="1")
    k = n + late + 1
    pool = [(v, lambda x: x[:n]), (more, lambda x: x[n:])]
    for _ in range(draw(st.integers(1, 7))):
        e, f = pool[rng.integers(len(pool))]
        other, g = pool[rng.integers(len(pool))]
        operation = draw(st.sampled_from(["+", "-", "scale", "matrix", "index", "sum", "stack", "*", "call"]))
        fit = e.size == other.size or 1 in (e.size, other.size)
        if operation in "+-" and fit:
            sign = 1 if operation == "+" else -1
            pool.append((e + other if sign > 0 else e - other, lambda x, f=f, g=g, s=sign: f(x) + s * g(x)))
        elif operation == "scale":
            c = rng.normal(size=e.size)
            pool.append((c * e + 1, lambda x, f=f, c=c: c * f(x) + 1))
        elif operation == "matrix":
            m = rng.normal(size=(rng.integers(1, 4), e.size)) * (rng.random(e.size) < 0.7)
            pool.append((m @ e, lambda x, f=f, m=m: m @ f(x)))
        elif operation == "index":
            i = rng.integers(e.size, size=rng.integers(1, 4))
            pool.append((e[i], lambda x, f=f, i=i: f(x)[i]))
        elif operation == "sum":
            pool.append((e.sum(), lambda x, f=f: f(x).sum(keepdims=True)))
        elif operation == "stack":
            pool.append((stack([e, other]), lambda x, f=f, g=g: np.concatenate([f(x), g(x)])))
        elif operation == "*" and e.is_affine and other.is_affine and fit:
            pool.append((e * other, lambda x, f=f, g=g: f(x) * g(x)))
        elif operation == "call" and e.is_affine:
            call = system.apply(np.sin, e, derivatives=lambda p: [np.cos(p)])
            pool.append((call, lambda x, f=f: np.sin(f(x))))
    e, f = pool[-1]
    return system, e, f, rng.normal(size=k)


@given(expressions())
def test_random_expressions_are_what_numpy_says(case):
    system, expression, function, x = case
    system.require(expression == 0, kind="k")
    equations = system.equations
    want = function(x)
    size = 1 + np.abs(want).max(initial=0.0)
    np.testing.assert_allclose(equations.closure(x), want, rtol=0, atol=1e-12 * size)
    assert equations.shape == (want.size, x.size)


@given(expressions())
def test_derivatives_against_differences(case):
    system, expression, function, x = case
    system.require(expression == 0, kind="k")
    jacobian = system.equations.jacobian(x).toarray()
    step = 1e-5
    for j in range(x.size):
        d = np.zeros(x.size)
        d[j] = step
        want = (function(x + d) - function(x - d)) / (2 * step)
        np.testing.assert_allclose(jacobian[:, j], want, rtol=1e-5, atol=1e-6 * (1 + np.abs(want).max(initial=0.0)))


@given(expressions())
def test_terms_add_up_to_the_closure(case):
    system, expression, _, x = case
    system.require(expression == 0, kind="k")
    positive, negative = system.equations.split_terms(x)
    assert np.all(positive >= 0)
    assert np.all(negative <= 0)
    size = 1 + positive - negative
    np.testing.assert_allclose((positive + negative - system.equations.closure(x)) / size, 0, atol=1e-13)
    assert np.all(system.equations.largest_term(x) <= np.maximum(positive, -negative) * (1 + 1e-12) + 1e-300)


# ---------------------------------------------------------------- what is refused


def call_of_a_call(system, v):
    inner = system.apply(np.sin, v, derivatives=lambda p: [np.cos(p)])
    return system.apply(np.sin, inner, derivatives=lambda p: [np.cos(p)])


REFUSED = {
    "products of products": (lambda s, v: (v * v) * v, ValueError, "only affine expressions can be multiplied"),
    "division by a variable": (lambda s, v: v / v, TypeError, "multiply the balance out"),
    "sizes": (lambda s, v: v + v[:2], ValueError, "3 and 2 entries"),
    "factors": (lambda s, v: v * np.ones(4), ValueError, "4 factors"),
    "terms": (lambda s, v: v + np.ones(4), ValueError, "3 and 4 entries"),
    "matrix": (lambda s, v: np.ones((2, 4)) @ v, ValueError, "4 columns, but the expression has 3"),
    "tables": (lambda s, v: v + np.ones((2, 2)), ValueError, "one-dimensional"),
    "table of factors": (lambda s, v: v * np.ones((2, 2)), ValueError, "one-dimensional"),
    "name": (lambda s, v: v["d"], KeyError, "no entry named 'd'"),
    "name of a sum": (lambda s, v: (v + v)["a"], KeyError, "no entry named 'a'"),
    "position": (lambda s, v: v[7], IndexError, "7"),
    "two systems": (lambda s, v: v + System().variables("q", ITEMS, unit="1"), ValueError, "two different systems"),
    "two systems stacked": (
        lambda s, v: stack([v, System().variables("q", ITEMS, unit="1")]), ValueError, "two different systems",
    ),
    "empty stack": (lambda s, v: stack([]), ValueError, "nothing to stack"),
    "call of a product": (lambda s, v: s.apply(np.sin, v * v, derivatives=lambda p: [p]), ValueError, "affine"),
    "call of a call": (call_of_a_call, ValueError, "affine"),
    "call of nothing": (lambda s, v: s.apply(np.sin, derivatives=list), ValueError, "affine"),
    "call of unequal sizes": (
        lambda s, v: s.apply(np.add, v, v[:2], derivatives=lambda p, q: [p, q]), ValueError, "same number of entries",
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", REFUSED)
def test_what_makes_no_sense_is_refused(system, v, name):
    build, kind, words = REFUSED[name]
    with pytest.raises(kind) as caught:
        build(system, v)
    assert words in str(caught.value)


@pytest.mark.parametrize(
    ("function", "derivatives", "words"),
    [
        (lambda p: 1 / 0, lambda p: [p], "ZeroDivisionError"),
        (lambda p: np.ones(7), lambda p: [p], "failed: ValueError"),
        (lambda p: "warm", lambda p: [p], "failed: ValueError"),
        (lambda p: p, lambda p: [p, p], "2 derivatives for 1 arguments"),
        (lambda p: p, lambda p: [np.ones(7)], "failed: ValueError"),
        (lambda p: p, lambda p: None, "failed: TypeError"),
    ],
)
def test_what_goes_wrong_inside_a_function_carries_the_name_of_its_domain(function, derivatives, words):
    system = System()
    with system.written_by("steam"):
        v = system.variables("q", ITEMS, unit="1")
        system.require(system.apply(function, v, derivatives=derivatives) == 0, kind="k")

    def both():
        return system.equations.closure(X), system.equations.jacobian(X)

    with pytest.raises(PluginError) as caught:
        both()
    assert "plugin 'steam'" in str(caught.value)
    assert words in str(caught.value)


def test_an_expression_is_no_truth_value_to_be_hashed(v):
    with pytest.raises(TypeError):
        hash(v)
