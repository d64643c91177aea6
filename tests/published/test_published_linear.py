"""Published linear cases: every printed figure to its last digit, every computed one to 6e-10."""

import numpy as np
import pytest
from published_cases import CASES, COMPUTED, adjusted, load, matches_print, network_of
from scipy.stats import chi2, norm

from reconcile.adjust.eliminate import dependent_rows, eliminate
from reconcile.diagnose.lookalike import basis, same_space
from reconcile.diagnose.sidak import sidak_limit
from reconcile.diagnose.tests_of_balances import nodal_test, principal_component_test

LINEAR = sorted(
    p.stem for p in CASES.glob("*.yaml") if {"network", "balances"} & load(p.stem).keys() and "readings" in load(p.stem)
)
LINEAR = [n for n in LINEAR if n != "distillation_bilinear"]


def by_reading(c, values):
    return dict(zip(c.readings, values, strict=True))


def by_node(c, values):
    return dict(zip(c.nodes, values, strict=True))


def by_variable(c, values):
    return {n: (float(v) if k else None) for n, v, k in zip(c.names, values, c.known, strict=True)}


def glr(c, signatures):
    """Test value and size of each fault alone: (f.p)^2 / f.f and f.p / f.f (Narasimhan & Mah 1987)."""
    shift, square = c.solution.parity @ signatures, (signatures**2).sum(axis=0)
    return [[t, s] for t, s in zip(shift**2 / square, shift / square, strict=True)]


def leak_signatures(c):
    """A leak at a node is missing in its balance: in - out - leak = 0."""
    return c.solution.adjuster.signature_of_columns(-np.eye(len(c.nodes)))


def reading_test(c):
    f = c.solution.adjuster.signatures
    return np.abs(c.solution.parity @ f) / np.linalg.norm(f, axis=0)


def nodal(c):
    return nodal_test(c.closure, c.covariance_of_closure, 0.05)


def principal_components(c):
    out = principal_component_test(c.closure, c.covariance_of_closure)
    return {"eigenvalues": out.eigenvalues, "scores": np.abs(out.scores)}


FIGURES = {
    "adjusted": lambda c: by_variable(c, c.solution.x),
    "adjusted_5": lambda c: by_variable(c, c.solution.x),
    "adjustment": lambda c: by_reading(c, c.solution.x[c.measured] - c.value),
    "sigma_adjusted": lambda c: by_variable(c, np.sqrt(np.diag(c.covariance))),
    "covariance": lambda c: c.covariance,
    "objective": lambda c: c.objective,
    "checks": lambda c: c.solution.adjuster.checks,
    "limit_95": lambda c: chi2.ppf(0.95, c.solution.adjuster.checks),
    "p": lambda c: chi2.sf(c.objective, c.solution.adjuster.checks),
    "s0": lambda c: np.sqrt(c.objective / c.solution.adjuster.checks),
    "reading_test": lambda c: by_reading(c, reading_test(c)),
    "redundancy_number": lambda c: by_reading(c, (c.solution.adjuster.signatures**2).sum(axis=0) * c.sigma**2),
    "closure": lambda c: by_node(c, c.closure),
    "balance_test": lambda c: by_node(c, np.abs(nodal(c).z)),
    "balance_test_max_power": lambda c: by_node(c, np.sqrt([t for t, _ in glr(c, leak_signatures(c))])),
    "bias_test": lambda c: by_reading(c, glr(c, c.solution.adjuster.signatures)),
    "leak_test": lambda c: by_node(c, glr(c, leak_signatures(c))),
    "principal_components": principal_components,
}


def pairs(got, want):
    """Figures side by side; a printed figure that names some variables is compared for those."""
    if isinstance(want, dict):
        assert want.keys() <= got.keys()
        for key, value in want.items():
            yield from pairs(got[key], value)
    elif isinstance(want, list):
        assert len(got) == len(want)
        for g, w in zip(got, want, strict=True):
            yield from pairs(g, w)
    else:
        yield got, want


def figures(section):
    return [(n, figure) for n in LINEAR for figure in load(n).get(section, {}) if figure != "exact_pairs"]


@pytest.mark.parametrize(("name", "figure"), figures("printed"))
def test_printed_figures_to_their_last_digit(name, figure):
    case = adjusted(name)
    stated = case.raw["printed"][figure]
    values = stated["values"]
    for slip in case.raw.get("misprints", []):
        if slip["figure"] == figure:
            *path, last = slip["at"]
            place = values
            for step in path:
                place = place[step]
            assert place[last] == slip["printed"]
            place[last] = slip["right"]
    for got, want in pairs(FIGURES[figure](case), values):
        assert (got is None) == (want is None)
        assert want is None or matches_print(got, want, stated["digits"]), (got, want)


@pytest.mark.parametrize(("name", "figure"), figures("computed"))
def test_figures_of_independent_programs(name, figure):
    case = adjusted(name)
    want_all = case.raw["computed"][figure]
    if figure == "principal_components":
        want_all = {"eigenvalues": want_all["eigenvalues"], "scores": [abs(s) for s in want_all["scores"]]}
    for got, want in pairs(FIGURES[figure](case), want_all):
        assert (got is None) == (want is None)
        assert want is None or abs(got - want) <= COMPUTED, (got, want)


def test_misprints_are_misprints():
    """The two corrected covariances break a rule that the source itself obeys elsewhere: F1 and F6 are one flow."""
    case = adjusted("cooling_water_all_measured")
    printed = np.array(case.raw["printed"]["covariance"]["values"])
    first, last = case.names.index("F1"), case.names.index("F6")
    differs = np.flatnonzero(printed[first] != printed[last])
    assert [int(i) for i in differs] == sorted(m["at"][0] for m in case.raw["misprints"] if m["at"][1] == last)


@pytest.mark.parametrize("name", [n for n in LINEAR if "classes" in load(n)])
def test_classes(name):
    case = adjusted(name)
    a, want = case.solution.adjuster, case.raw["classes"]
    tags = np.array(list(case.readings))
    free = np.array(case.names)[case.solution.free]
    assert list(tags[a.redundant]) == want["checked"]
    assert list(tags[~a.redundant]) == want["unchecked"]
    assert list(free[a.observable]) == want["calculated"]
    assert list(free[~a.observable]) == want["unknown"]


@pytest.mark.parametrize("name", [n for n in LINEAR if "reduced" in load(n)])
def test_reduced_balance(name):
    """What the balances say of measured flows alone, up to a factor."""
    case = adjusted(name)
    form = case.solution.adjuster.form
    assert form.shape == (1, len(case.readings))
    want = np.array([case.raw["reduced"].get(n, 0.0) for n in case.readings])
    scaled = form[0] / form[0, np.flatnonzero(want)[0]]
    np.testing.assert_allclose(scaled, want, rtol=0, atol=1e-14)


def test_projection_of_unmeasured_flows():
    raw = load("cooling_water_only_16")
    network = network_of(raw)
    free = [i for i, s in enumerate(network.streams) if s not in raw["readings"]]
    out = eliminate(network.incidence.toarray()[:, free])
    assert out.rank == raw["rank_of_unmeasured"]
    np.testing.assert_allclose(out.keep * np.sign(out.keep[0, 0]), raw["projection"], rtol=0, atol=1e-14)


def test_largest_bias_and_the_leak_that_explains_more():
    case = adjusted("hx_bypass_bias_f2")
    assert max(case.readings, key=lambda n: FIGURES["reading_test"](case)[n]) == case.raw["largest_bias"]
    biases, leaks = FIGURES["bias_test"](case), FIGURES["leak_test"](case)
    assert max(t for t, _ in leaks.values()) > max(t for t, _ in biases.values())


def test_sidak_limits():
    raw = load("hx_bypass_bias_f2")["sidak_limits_5_percent"]
    for count, limit in zip(raw["of"], raw["values"], strict=True):
        assert abs(sidak_limit(0.05, count) - limit) <= COMPUTED
        assert abs(norm.isf(0.5 * (1 - 0.95 ** (1 / count))) - limit) <= COMPUTED


def test_removal_of_a_reading():
    """Dropping F2: adjusted values and objective; the drop of the objective is the square of its test (Crowe 1992)."""
    case = adjusted("hx_bypass_bias_f2")
    spec = case.raw["without"]
    index = list(case.readings).index(spec["reading"])
    less = case.solution.adjuster.without([index])
    x, parity = less.adjust(case.value[None], np.zeros(len(case.nodes)))
    got = dict(zip(case.names, x[0], strict=True))
    stated = spec["printed"]["adjusted"]
    for g, want in pairs(got, stated["values"]):
        assert matches_print(g, want, stated["digits"])
    for g, want in pairs(got, spec["computed"]["adjusted"]):
        assert abs(g - want) <= COMPUTED
    assert abs((parity**2).sum() - spec["computed"]["objective"]) <= COMPUTED
    assert less.checks == spec["computed"]["checks"]
    drop, size = FIGURES["bias_test"](case)[spec["reading"]]
    assert abs(case.objective - (parity**2).sum() - drop) <= 1e-12
    assert abs(size - spec["estimated_bias"]) <= COMPUTED
    assert abs(case.value[index] - x[0, index] - size) <= 1e-12


def test_covariance_of_levelled_heights():
    case = adjusted("ghilani_level_unweighted")
    free = case.solution.free
    assert [case.names[i] for i in free] == ["A", "B", "C"]
    np.testing.assert_allclose(
        case.covariance[np.ix_(free, free)], case.raw["covariance_of_heights"], rtol=0, atol=1e-10
    )


def test_redundancy_numbers_add_up_to_the_checks():
    case = adjusted("ghilani_level_unweighted")
    assert abs(sum(FIGURES["redundancy_number"](case).values()) - case.solution.adjuster.checks) < 1e-13


# ---------------------------------------------------------------- equivalent sets


def explains(case, chosen):
    """Sizes of these biases if they explain all of the evidence, else None."""
    f = case.solution.adjuster.signatures[:, list(chosen)]
    size, *_ = np.linalg.lstsq(f, case.solution.parity, rcond=None)
    rest = case.solution.parity - f @ size
    return size if np.linalg.norm(rest) < 1e-10 * np.linalg.norm(case.solution.parity) else None


def test_equivalent_sets():
    case = adjusted("jiang_bagajewicz_equivalent_sets")
    n, tags = len(case.readings), list(case.readings)
    assert all(explains(case, [i]) is None for i in range(n))
    found = {}
    for i in range(n):
        for j in range(i + 1, n):
            size = explains(case, [i, j])
            if size is not None:
                found[f"{tags[i]},{tags[j]}"] = size
    want = case.raw["computed"]["exact_pairs"]
    assert found.keys() == want.keys()
    for pair, size in want.items():
        np.testing.assert_allclose(found[pair], size, rtol=0, atol=1e-12)
    f = case.solution.adjuster.signatures
    spaces = [basis(f[:, [tags.index(t) for t in pair.split(",")]]) for pair in found]
    assert all(same_space(spaces[0], other) for other in spaces[1:])
    assert not same_space(spaces[0], basis(f[:, [0, 1]]))


def test_equivalent_sets_leave_different_flows():
    """Each set, its biases removed, leaves readings that close without any adjustment: the printed flows."""
    case = adjusted("jiang_bagajewicz_equivalent_sets")
    for stated in case.raw["equivalent"]:
        y = case.value - np.array([stated["biases"].get(t, 0.0) for t in case.readings])
        x, parity = case.solution.adjuster.adjust(y[None], np.zeros(len(case.nodes)))
        assert np.abs(parity).max() < 1e-13
        np.testing.assert_allclose(x[0], list(stated["adjusted"].values()), rtol=0, atol=1e-13)


def test_dependent_balance_is_named():
    """The sum of all node balances is the balance of the whole plant: implied, and told as such."""
    network = network_of(load("hx_bypass_all_measured"))
    a = network.incidence.toarray()
    found = dependent_rows(np.vstack([a, a.sum(axis=0)]))
    np.testing.assert_allclose(found, [[-1, -1, -1, -1, 1]], rtol=0, atol=1e-13)
