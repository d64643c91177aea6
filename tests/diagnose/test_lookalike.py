"""Ties between faults: known ones of small networks, and invariances."""

import numpy as np
import pytest
from diagnose_networks import BYPASS, CYCLE, LOOP, SKID
from hypothesis import given
from hypothesis import strategies as st

from reconcile.diagnose.lookalike import classes, near_parallel, set_classes
from reconcile.diagnose.refusal import Refusal


def named(net, sets):
    return [tuple(net.streams[i] for i in s) for s in sets]


def test_meters_of_one_balance_alone_look_alike():
    alike = classes(LOOP.biases, scale=1 / LOOP.sigma)
    assert named(LOOP, alike.tied) == [("F", "R"), ("C", "L")]
    assert named(LOOP, [alike.unchecked]) == [("W",)]
    # +1 in F and +1 in R shift the evidence alike; so do +1 in C and +1 in L
    assert alike.ratio == pytest.approx([1, 1, 1, 1, 1, 0])


def test_a_loss_at_a_node_looks_like_its_only_meter_that_no_other_balance_has():
    f = np.hstack([SKID.biases, SKID.leaks])
    alike = classes(f)
    # feed F enters the mixer only, permeate P leaves the module only, bleed B leaves the splitter only
    assert alike.tied == ((0, 6), (3, 7), (5, 8))
    assert alike.ratio[[6, 7, 8]] == pytest.approx([1, -1, -1])


def test_equivalent_pairs_of_a_cycle():
    pairs = [(i, j) for i in range(6) for j in range(i)]
    found = {frozenset(map(frozenset, c.sets)) for c in set_classes(CYCLE.biases, pairs) if len(c.sets) > 1}
    s = {name: i for i, name in enumerate(CYCLE.streams)}
    cycle = frozenset(frozenset({s[a], s[b]}) for a, b in [("S2", "S4"), ("S2", "S5"), ("S4", "S5")])
    # Bagajewicz & Jiang 1998: any two biases of a cycle of three streams are equivalent
    assert cycle in found


def test_a_set_with_a_dependent_member_spans_what_two_of_it_span():
    s = {name: i for i, name in enumerate(SKID.streams)}
    cycle = (s["F"], s["R"], s["B"])
    (only,) = set_classes(SKID.biases, [cycle, cycle[:2], cycle[1:], (s["F"], s["B"])])
    assert only.rank == 2
    assert len(only.sets) == 4


def test_nearly_parallel_meters_of_the_skid():
    # computed independently: F-P -0.96, P-B +0.95, F-B -0.94
    pairs = near_parallel(SKID.biases)
    assert [SKID.streams[a] + SKID.streams[b] for a, b in zip(pairs.first, pairs.second, strict=True)] == [
        "FP",
        "PB",
        "FB",
    ]
    assert pairs.correlation == pytest.approx([-0.96, 0.95, -0.94], abs=0.005)
    assert not pairs.tied.any()


def test_exact_ties_are_marked_even_at_threshold_one():
    pairs = near_parallel(LOOP.biases, 1.0)
    assert list(zip(pairs.first, pairs.second, strict=True)) == [(0, 1), (3, 4)]
    assert pairs.tied.all()


@pytest.mark.parametrize("threshold", [0.0, 1.1, float("nan")])
def test_threshold_must_be_a_correlation(threshold):
    with pytest.raises(Refusal, match="threshold-out-of-range"):
        near_parallel(SKID.biases, threshold)


def test_a_signature_that_is_not_a_number_is_refused():
    f = SKID.biases.copy()
    f[1, 2] = np.nan
    with pytest.raises(Refusal, match="signature-not-finite"):
        classes(f)


def test_scale_decides_what_counts_as_zero():
    # a meter with sigma 1e9 has short signatures in its unit, and is checked nevertheless
    f = np.array([[1.0, 1e-12], [0.0, 1e-12]])
    assert classes(f, scale=[1.0, 1e-12]).unchecked == ()
    assert classes(f).unchecked == (1,)


@given(seed=st.integers(0, 10**6), powers=st.lists(st.integers(-6, 6), min_size=6, max_size=6))
def test_classes_do_not_depend_on_units_signs_order_or_basis(seed, powers):
    rng = np.random.default_rng(seed)
    f = np.hstack([BYPASS.biases, BYPASS.leaks])
    k = f.shape[1]
    scale = rng.choice([-1, 1], k) * np.resize(10.0 ** np.array(powers), k)
    order = rng.permutation(k)
    q = np.linalg.qr(rng.normal(size=(4, 4)))[0]
    alike = classes((q @ f * scale)[:, order], scale=np.abs(scale)[order])
    ties = {frozenset(int(order[i]) for i in m) for m in alike.tied}
    # node 1 is where F1 alone enters; node 4 is where F6 alone leaves
    assert ties == {frozenset({0, 6}), frozenset({5, 9})}
