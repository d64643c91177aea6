"""The search for sets that fit: nothing may be missed, whatever the budget says."""

import itertools

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from reconcile.diagnose.explain import Explainer, explanations
from reconcile.diagnose.faultsets import make_spans
from reconcile.diagnose.lookalike import set_classes
from reconcile.diagnose.search import search
from reconcile.diagnose.verdict import Reason, verdict


def leftover(p, u, one):
    if not one:
        return p @ p
    fit = u[:, list(one)] @ np.linalg.lstsq(u[:, list(one)], p, rcond=None)[0]
    return (p - fit) @ (p - fit)


def chain(n, rng):
    """Signatures, per sigma, of the flows along a line of n nodes with a side stream at each: a sparse network."""
    a = np.zeros((n, 2 * n + 1))
    for i in range(n):
        a[i, i], a[i, i + 1], a[i, n + 1 + i] = 1, -1, -1
    sigma = np.exp(rng.normal(size=2 * n + 1) * 0.5)
    return np.linalg.solve(np.linalg.cholesky((a * sigma**2) @ a.T), a) * sigma


def by_enumeration(p, u, cutoff, most):
    return {
        one
        for s in range(1, most + 1)
        for one in itertools.combinations(range(u.shape[1]), s)
        if leftover(p, u, one) <= cutoff
    }


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6), most=st.integers(1, 3), share=st.floats(0.05, 0.9))
def test_search_finds_exactly_what_enumeration_finds(seed, most, share):
    rng = np.random.default_rng(seed)
    f = chain(6, rng)
    u = f / np.linalg.norm(f, axis=0)
    p = rng.normal(size=6) + u @ (rng.normal(size=13) * 8 * (rng.random(13) < 0.2))
    cutoff = share * p @ p
    found = search(p, u, cutoff, most)
    assert found.complete_to == most
    assert found.with_supersets
    assert len(found.sets) == len(set(found.sets))
    assert set(found.sets) == by_enumeration(p, u, cutoff, most)


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_dependent_and_nearly_dependent_columns_are_no_exception(seed):
    rng = np.random.default_rng(seed)
    base = rng.normal(size=(5, 5))
    mixed = base @ rng.normal(size=(5, 3))
    near = base[:, :2] + 1e-3 * rng.normal(size=(5, 2))
    u = np.hstack([base, mixed, near, base[:, [0]] + base[:, [1]]])
    u /= np.linalg.norm(u, axis=0)
    p = 10 * rng.normal(size=5)
    cutoff = 0.1 * p @ p
    assert set(search(p, u, cutoff, 3).sets) == by_enumeration(p, u, cutoff, 3)


def test_a_network_with_too_many_sets_to_look_at_each():
    # 121 candidates, up to 3 faults: 295 000 sets; two biases are found by branching on a few hundred
    rng = np.random.default_rng(11)
    f = chain(60, rng)
    p = rng.normal(size=60) + f[:, 30] * 30 / np.linalg.norm(f[:, 30]) - f[:, 100] * 25 / np.linalg.norm(f[:, 100])
    explainer = Explainer(f, fault_rate=0.01, size_prior=15.0, max_faults=3)
    assert not explainer.exhaustive
    found = explainer.explain(p)
    assert found.complete_to == 3
    assert found.at_least == 2
    assert found.unexplored < 0.05
    best = max((m for e in found.listed for m in e.members), key=lambda m: m.probability)
    assert best.candidates == (30, 100)


def test_a_search_agrees_with_looking_at_every_set():
    rng = np.random.default_rng(3)
    f = chain(14, rng)
    p = rng.normal(size=14) + 12 * f[:, 7] / np.linalg.norm(f[:, 7]) + 9 * f[:, 20] / np.linalg.norm(f[:, 20])
    setting = {"fault_rate": 0.02, "size_prior": 12.0, "max_faults": 3}
    every = explanations(p, f, **setting)
    assert every.exhaustive
    searched = explanations(p, f, limit_on_sets=2500, **setting)
    assert not searched.exhaustive
    assert searched.complete_to == 3
    assert {e.members[0].candidates for e in searched.listed if e.minimal} == {
        e.members[0].candidates for e in every.listed if e.minimal
    }
    one = {m.candidates: (e.leftover, m.probability) for e in every.listed for m in e.members}
    two = {m.candidates: (e.leftover, m.probability) for e in searched.listed for m in e.members}
    shared = one.keys() & two.keys()
    assert len(shared) > 50
    for s in shared:
        assert two[s][0] == pytest.approx(one[s][0], rel=1e-8, abs=1e-8)
        # probabilities of the search are relative to what it evaluated: too high, by no more than it says
        assert one[s][1] * (1 - 1e-9) <= two[s][1]
        assert two[s][1] * (1 - searched.unexplored) <= one[s][1] * (1 + 1e-9)


@pytest.mark.parametrize("seed", range(5))
def test_the_bound_on_what_was_not_looked_at_holds(seed):
    rng = np.random.default_rng(seed)
    f = chain(10, rng)
    sides = rng.choice([0, 0, 1], 21)
    p = 2 * rng.normal(size=10)
    setting = {"sides": sides, "fault_rate": 0.05, "size_prior": 6.0, "max_faults": 2}
    every = explanations(p, f, **setting)
    searched = explanations(p, f, limit_on_sets=150, **setting)
    assert every.exhaustive
    assert not searched.exhaustive
    # none: nothing but the total differs
    missed = 1 - every.none / searched.none
    assert 0 <= missed <= searched.unexplored


def test_when_the_budget_is_spent_it_says_so():
    rng = np.random.default_rng(0)
    u = rng.normal(size=(12, 40))
    u /= np.linalg.norm(u, axis=0)
    p = 6 * rng.normal(size=12)
    found = search(p, u, 0.02 * p @ p, 4, node_limit=60)
    assert 1 <= found.complete_to < 4
    assert by_enumeration(p, u, found.cutoff, found.complete_to) == set(found.sets)
    told = explanations(p, u, fault_rate=0.01, size_prior=10.0, max_faults=4, limit_on_sets=400)
    said = verdict(told)
    assert told.complete_to < 4 or Reason.INCOMPLETE in said.reasons
    assert told.unexplored == pytest.approx(1.0, abs=0.5)


def test_spaces_of_many_sets_are_told_apart():
    rng = np.random.default_rng(1)
    f = chain(8, rng)
    f = np.column_stack([f, f[:, 3] + f[:, 5]])
    u = f / np.linalg.norm(f, axis=0)
    every = [c for s in (1, 2, 3) for c in itertools.combinations(range(18), s)]
    spans = make_spans(every, u)
    assert spans.number.keys() == set(every)
    # one flow and both its neighbours at a node are three columns in two dimensions or not: by the rank of each pair
    for one, two in [((3, 5), (3, 17)), ((3, 5), (5, 17)), ((3, 5, 17), (3, 5))]:
        assert spans.number[one] == spans.number[two]
    assert spans.number[(3, 4)] != spans.number[(3, 5)]
    for group in spans.sets:
        for other in group[1:]:
            both = u[:, sorted({*group[0], *other})]
            assert np.linalg.matrix_rank(both, tol=1e-6) == len(group[0])
    pairs = [c for c in every if len(c) == 2]
    slowly = {frozenset(c.sets) for c in set_classes(u, pairs) if c.rank == 2}
    assert {frozenset(g) for g in spans.sets if len(g[0]) == 2} == slowly
    assert max(map(len, slowly)) > 1
    dims = {n: len(g[0]) for n, g in enumerate(spans.sets)}
    for s, n in spans.number.items():
        assert np.linalg.matrix_rank(u[:, list(s)], tol=1e-6) == dims[n]
