"""Explanations of small networks with known figures, and what must not change them."""

import itertools

import numpy as np
import pytest
from diagnose_networks import (
    BYPASS,
    BYPASS_READING,
    CYCLE,
    CYCLE_READING,
    LOOP,
    LOOP_READING,
    SKID,
    SKID_R_AND_P,
    SKID_R_HIGH,
)
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import chi2, multivariate_normal

from reconcile.diagnose.explain import Evidence, Explainer, explanations
from reconcile.diagnose.refusal import Refusal
from reconcile.diagnose.verdict import Conclusion, Reason, verdict


def explain(net, reading, most, *, leaks=False, rate=0.02, **more):
    f, sides, spread = net.biases, np.zeros(len(net.sigma), dtype=int), 10 * net.sigma
    if leaks:
        n = net.leaks.shape[1]
        f, sides = np.hstack([f, net.leaks]), np.append(sides, np.ones(n, dtype=int))
        spread = np.append(spread, np.full(n, spread.max()))
    return explanations(
        net.parity(reading), f, sides=sides, fault_rate=rate, size_prior=spread, max_faults=most, **more
    )


def by_names(net, found, faults):
    """Leftover and members of each explanation with that many faults, by the names in it."""
    names = [*net.streams, *(f"loss {i}" for i in range(len(net.matrix)))]
    out = {}
    for e in found.listed:
        if e.faults == faults:
            for m in e.members:
                out["".join(sorted(names[i] for i in m.candidates))] = (e, m)
    return out


# ---------------------------------------------------------------------- one fault


def test_one_bias_in_the_recycle_of_the_skid():
    found = explain(SKID, SKID_R_HIGH, 2)
    assert found.objective == pytest.approx(15.50, abs=0.005)
    assert found.p_value == pytest.approx(0.0014, abs=5e-5)
    single = by_names(SKID, found, 1)
    # adjusted again by a normal-equations solver with each reading left out in turn
    left = [single[n][0].leftover for n in SKID.streams]
    assert left == pytest.approx([14.7258, 0.3655, 12.7025, 15.3476, 9.1460, 15.3218], abs=5e-5)
    assert [single[n][0].survives for n in SKID.streams] == [False, True, False, False, False, False]
    size, sd = single["R"][1].sizes[0], single["R"][1].covariance[0, 0] ** 0.5
    assert (size, sd) == pytest.approx((7.636, 1.9626), abs=5e-4)
    assert found.listed[0] is single["R"][0]
    assert found.listed[0].limit == pytest.approx(5.991, abs=5e-4)
    assert found.at_least == 1
    said = verdict(found)
    assert said.conclusion is Conclusion.ONE
    assert said.best.candidates == (1,)
    assert said.reasons == ()


def test_no_loss_explains_the_recycle_bias_and_losses_tie_with_meters():
    found = explain(SKID, SKID_R_HIGH, 1, leaks=True)
    single = by_names(SKID, found, 1)
    losses = {n: single[f"loss {i}"] for i, n in enumerate("FPB")}
    assert min(e.leftover for e, _ in losses.values()) == pytest.approx(14.7258, abs=5e-5)
    assert all(losses[n][0] is single[n][0] for n in "FPB")
    # the splitter would have to gain, which a loss cannot
    assert [m.allowed for _, m in losses.values()] == [True, True, False]
    assert losses["B"][1].at_bound == (8,)
    assert losses["B"][1].bounded_leftover == pytest.approx(found.objective)
    assert losses["F"][1].bounded_leftover == pytest.approx(14.7258, abs=5e-5)
    assert verdict(found).best.candidates == (1,)


def test_a_tie_is_never_broken():
    found = explain(LOOP, LOOP_READING, 1, leaks=True)
    assert found.objective == pytest.approx(19.2286, abs=5e-5)
    single = by_names(LOOP, found, 1)
    tied = single["F"][0]
    assert {m.candidates for m in tied.members} == {(0,), (1,), (6,)}
    assert tied.leftover == pytest.approx(0.0222, abs=5e-5)
    for name in ("F", "R", "loss 0"):
        assert single[name][1].sizes[0] == pytest.approx(2.4444, abs=5e-5)
        assert single[name][1].covariance[0, 0] ** 0.5 == pytest.approx(0.5578, abs=5e-5)
    assert single["C"][0] is single["L"][0]
    assert (single["C"][0].leftover, single["S"][0].leftover) == pytest.approx((13.8889, 14.4), abs=5e-5)
    said = verdict(found)
    assert said.conclusion is Conclusion.CANNOT_TELL
    assert Reason.TIED in said.reasons
    # not even where priors all but exclude the others
    rate = np.full(8, 1e-7)
    rate[0] = 0.1
    said = verdict(explain(LOOP, LOOP_READING, 1, leaks=True, rate=rate))
    assert said.best.candidates == (0,)
    assert said.share > 0.999
    assert said.reasons == (Reason.TIED,)


def test_what_nothing_checks_keeps_its_prior():
    found = explain(LOOP, LOOP_READING, 1, rate=0.03)
    assert found.alike.unchecked == (5,)
    assert found.candidate[5] == 0.03
    assert all(5 not in m.candidates for e in found.listed for m in e.members)


def test_a_second_feed_meter_clears_the_feed():
    # the loop with a second reading of F, 20.3 +/- 0.3: chi2 19.60; F 15.24; R and a loss stay tied at 0.10
    a = np.array([[1, 1, -1, 0, 0, 0, 0], [0, 0, 1, -1, -1, 0, 0], [1, 0, 0, 0, 0, 0, -1]], dtype=float)
    net = type(LOOP)((*LOOP.streams, "F2"), a, np.append(LOOP.sigma, 0.3))
    f = np.hstack([net.biases, net.leaks[:, :1]])
    found = explanations(
        net.parity([*LOOP_READING, 20.3]), f, fault_rate=0.02, size_prior=3.0, max_faults=1, scale=np.ones(8)
    )
    assert found.objective == pytest.approx(19.60, abs=0.005)
    left = {m.candidates[0]: (e, m) for e in found.listed for m in e.members}
    assert left[0][0].leftover == pytest.approx(15.24, abs=0.005)
    assert left[1][0].leftover == pytest.approx(0.10, abs=0.005)
    assert left[1][0] is left[7][0]
    assert left[1][1].sizes[0] == pytest.approx(2.41, abs=0.005)
    assert left[1][1].covariance[0, 0] ** 0.5 == pytest.approx(0.55, abs=0.005)


def test_chemostat_ties_by_reduction_degree_and_sign():
    # carbon and degree of reduction; glucose, O2, CO2, biomass (CH1.8O0.5N0.2 has 4.2 electrons per carbon); a hidden
    # product of 2 carbons with 4 (acetate) or 6 (ethanol) electrons each. Invented readings; figures computed
    # independently.
    net = type(LOOP)(
        ("glc", "O2", "CO2", "X"), np.array([[6, 0, -1, -1], [24, -4, 0, -4.2]]), np.array([0.2, 0.9, 0.9, 1.2])
    )
    hidden = net.whiten(np.array([[2.0, 2.0], [8.0, 12.0]]))
    f = np.hstack([net.biases, hidden])
    setting = {"sides": [0, 0, 0, 0, 1, 1], "fault_rate": 0.02, "size_prior": 10.0, "max_faults": 1}

    low = explanations(net.parity([10.1, 28.2, 26.4, 30.6]), f, **setting)
    left = {m.candidates[0]: (e, m) for e in low.listed for m in e.members}
    assert low.objective == pytest.approx(8.1274, abs=5e-5)
    want = [6.8298, 3.5122, 0.0190, 7.2190, 6.8298, 8.01]
    assert [left[i][0].leftover for i in range(6)] == pytest.approx(want, abs=5e-3)
    assert verdict(low).conclusion is Conclusion.CANNOT_TELL
    assert [e.members[0].candidates for e in verdict(low).rivals] == [(2,), (1,)]

    acetate = explanations(net.parity([10.05, 29.1, 29.6, 24.4]), f, **setting)
    left = {m.candidates[0]: (e, m) for e in acetate.listed for m in e.members}
    assert left[0][0] is left[4][0]
    assert [left[i][0].leftover for i in (0, 3, 5, 2)] == pytest.approx([0.3193, 0.6277, 4.56, 8.1135], abs=5e-3)
    assert (left[4][1].sizes[0], left[4][1].covariance[0, 0] ** 0.5) == pytest.approx((2.99, 0.92), abs=5e-3)
    assert left[4][1].allowed

    # mirrored about perfect closure, the product would have to be consumed: not offered
    mirrored = explanations(-net.parity([10.05, 29.1, 29.6, 24.4]), f, **setting)
    tied = next(e for e in mirrored.listed if e.members[0].candidates == (0,))
    assert [(m.candidates, m.allowed) for m in tied.members] == [((0,), True), ((4,), False)]
    assert [m.candidates for m in tied.offered] == [(0,)]


def test_a_loss_in_the_bypass_beats_the_bias_that_was_put_in():
    found = explain(BYPASS, BYPASS_READING, 2, leaks=True)
    assert found.objective == pytest.approx(16.674, abs=5e-4)
    single = by_names(BYPASS, found, 1)
    # likelihood ratios, recomputed: F2 10.2704, loss at node 2 13.2496
    assert 16.6741667 - single["F2"][0].leftover == pytest.approx(10.2704167, abs=1e-6)
    assert 16.6741667 - single["loss 1"][0].leftover == pytest.approx(13.2496, abs=1e-6)
    assert single["F2"][0].leftover == pytest.approx(6.40375, abs=1e-6)
    assert single["F2"][1].sizes[0] == pytest.approx(3.925)
    said = verdict(found)
    assert said.conclusion is Conclusion.CANNOT_TELL
    assert Reason.RIVALS in said.reasons


# ---------------------------------------------------------------------- two faults


def test_two_faults_where_the_largest_single_test_is_wrong():
    found = explain(SKID, SKID_R_AND_P, 2)
    assert found.objective == pytest.approx(31.5633, abs=5e-5)
    single, double = by_names(SKID, found, 1), by_names(SKID, found, 2)
    assert single["F"][0].leftover == pytest.approx(12.5225, abs=5e-5)  # the largest single test, yet sound
    assert not any(e.survives for e, _ in single.values())
    assert found.at_least == 2
    best, fit = double["PR"]
    assert best.leftover == pytest.approx(0.0, abs=0.005)
    order = [SKID.streams[i] for i in fit.candidates]
    assert dict(zip(order, fit.sizes, strict=True)) == pytest.approx({"R": 7.7, "P": -2.8}, abs=0.005)
    cycle = double["FR"][0]
    assert double["BF"][0] is double["BR"][0] is cycle
    assert len(cycle.members) == 3
    assert cycle.leftover == pytest.approx(1.17, abs=0.005)
    assert double["FT"][0].leftover == pytest.approx(3.72, abs=0.005)
    assert best.limit == pytest.approx(3.841, abs=5e-4)
    surviving = {id(e) for e in found.surviving}
    assert surviving == {id(best), id(cycle), id(double["FT"][0])}
    said = verdict(found)
    assert said.conclusion is Conclusion.CANNOT_TELL
    assert said.at_least == 2
    assert said.best.candidates == fit.candidates
    assert {id(e) for e in said.rivals} == surviving


def test_exact_pairs_of_the_cycle():
    # small sigmas make the published biases large against the noise
    sharp = type(CYCLE)(CYCLE.streams, CYCLE.matrix, CYCLE.sigma * 0.05)
    found = explain(sharp, CYCLE_READING, 2)
    (only,) = (e for e in found.listed if e.minimal)
    assert only.leftover == pytest.approx(0, abs=1e-9)
    sizes = {tuple(sharp.streams[i] for i in m.candidates): tuple(m.sizes) for m in only.members}
    want = {("S2", "S4"): (1, -1), ("S2", "S5"): (2, 1), ("S4", "S5"): (-2, -1)}
    assert sizes.keys() == want.keys()
    for pair, size in want.items():
        assert sizes[pair] == pytest.approx(size)


def test_larger_sets_in_the_same_space_count_for_it():
    found = explain(LOOP, LOOP_READING, 1)
    assert all(e.with_more == 0 for e in found.listed)
    found = explain(SKID, SKID_R_AND_P, 3, saturated=True)
    cycle = by_names(SKID, found, 2)["FR"][0]
    assert cycle.with_more > 0  # F, R and B together
    assert all(m.probability > 0 for m in cycle.members)


# ---------------------------------------------------------------------- probabilities


def test_probabilities_are_those_of_the_model():
    """Against multivariate normal densities of every set, written out."""
    rate = np.array([0.02, 0.05, 0.01, 0.1, 0.03, 0.04])
    spread = np.array([2.0, 8.0, 9.0, 3.0, 6.0, 1.0])
    explainer = Explainer(SKID.biases, fault_rate=rate, size_prior=spread, max_faults=2)
    p = SKID.parity(SKID_R_AND_P)
    sets, got = explainer.posterior(p)
    weights = []
    for s in sets:
        on = np.isin(np.arange(6), s)
        f = SKID.biases[:, on] * spread[on]
        weights.append(
            np.prod(np.where(on, rate, 1 - rate)) * multivariate_normal(np.zeros(3), np.eye(3) + f @ f.T).pdf(p)
        )
    assert len(sets) == 1 + 6 + 15
    assert got == pytest.approx(np.array(weights) / np.sum(weights), rel=1e-9)
    found = explainer.explain(p)
    assert found.none == pytest.approx(got[0])
    assert sum(e.probability for e in found.listed) + found.none == pytest.approx(1)
    on = [sum(q for s, q in zip(sets, got, strict=True) if i in s) for i in range(6)]
    assert found.candidate == pytest.approx(on)
    binomial = [
        sum(
            np.prod([rate[i] if i in s else 1 - rate[i] for i in range(6)]) for s in itertools.combinations(range(6), n)
        )
        for n in range(3)
    ]
    assert found.prior_beyond == pytest.approx(1 - sum(binomial))


@pytest.mark.parametrize("reading", [SKID_R_HIGH, SKID_R_AND_P])
def test_one_sided_sizes_against_quadrature(reading):
    """A loss and a one-sided bias: two-dimensional quadrature of likelihood times half-normal priors."""
    f = np.hstack([SKID.biases, SKID.leaks])
    sides = np.array([0, 1, 0, -1, 0, 0, 1, 1, 1])
    spread = np.array([5.0, 15, 20, 4, 16, 2, 10, 10, 10])
    p = SKID.parity(reading)
    explainer = Explainer(f, sides=sides, fault_rate=0.02, size_prior=spread, max_faults=2)
    sets, got = explainer.posterior(p)
    at = {s: q / got[0] for s, q in zip(sets, got, strict=True)}
    odds = 0.02 / 0.98
    x, w = np.polynomial.legendre.leggauss(800)
    z, w = 4.0 * (x + 1), 4.0 * w  # half-normal within 8 sigma
    prior = w * np.sqrt(2 / np.pi) * np.exp(-0.5 * z**2)
    for pair in [(1, 3), (1, 6), (3, 7), (6, 7)]:
        b = [z * spread[i] * sides[i] for i in pair]
        rest = p[:, None, None] - f[:, pair[0], None, None] * b[0][:, None] - f[:, pair[1], None, None] * b[1]
        likelihood = np.exp(-0.5 * (np.sum(rest**2, axis=0) - p @ p))
        assert at[pair] == pytest.approx(odds**2 * prior @ likelihood @ prior, rel=1e-6)
    for one in (1, 3, 6, 7):
        rest = p[:, None] - f[:, [one]] * (z * spread[one] * sides[one])
        likelihood = np.exp(-0.5 * (np.sum(rest**2, axis=0) - p @ p))
        assert at[(one,)] == pytest.approx(odds * prior @ likelihood, rel=1e-8)


@settings(max_examples=40, deadline=None)
@given(seed=st.integers(0, 10**6))
def test_units_signs_order_and_basis_change_nothing(seed):
    rng = np.random.default_rng(seed)
    f = np.hstack([SKID.biases, SKID.leaks])
    sides = np.array([0] * 6 + [1] * 3)
    spread = np.append(10 * SKID.sigma, [10, 10, 10])
    rate = rng.uniform(0.001, 0.1, 9)
    p = SKID.parity(SKID_R_AND_P + rng.normal(size=6) * SKID.sigma)
    plain = explanations(p, f, sides=sides, fault_rate=rate, size_prior=spread, max_faults=2)
    unit = 10.0 ** rng.integers(-6, 7, 9)
    flip = rng.choice([-1, 1], 9)
    order = rng.permutation(9)
    q = np.linalg.qr(rng.normal(size=(3, 3)))[0]
    other = explanations(
        q @ p,
        (q @ f * unit * flip)[:, order],
        sides=(sides * flip)[order],
        fault_rate=rate[order],
        size_prior=(spread / unit)[order],
        max_faults=2,
        scale=unit[order],
    )
    assert other.none == pytest.approx(plain.none, rel=1e-7)
    assert other.candidate[np.argsort(order)] == pytest.approx(plain.candidate, rel=1e-6, abs=1e-12)

    def table(found, back):
        return {
            frozenset(back[i] for i in m.candidates): (e.leftover, m.probability, m.allowed, e.survives)
            for e in found.listed
            for m in e.members
        }

    one, two = table(plain, range(9)), table(other, order)
    assert one.keys() == two.keys()
    for s in one:
        assert two[s][:2] == pytest.approx(one[s][:2], rel=1e-6, abs=1e-9)
        assert two[s][2:] == one[s][2:]


def test_strong_evidence_keeps_the_leftover_exact():
    # a bias of a million sigmas: 1e12 in the objective, and the leftover still has its digits
    p = SKID.biases[:, 1] * 1e6 + np.array([0.3, -0.2, 0.1])
    found = explanations(p, SKID.biases, fault_rate=0.01, size_prior=1e6, max_faults=1)
    unit = SKID.biases[:, 1] / np.linalg.norm(SKID.biases[:, 1])
    small = np.array([0.3, -0.2, 0.1])
    exact = small @ small - (unit @ small) ** 2
    assert found.listed[0].leftover == pytest.approx(exact, rel=1e-6)
    assert found.listed[0].members[0].candidates == (1,)


# ---------------------------------------------------------------------- refusals and edges


def test_as_many_faults_as_checks_is_refused():
    with pytest.raises(Refusal, match="every set would fit") as caught:
        explain(SKID, SKID_R_HIGH, 3)
    assert caught.value.code == "too-many-faults"
    assert "at most 2" in str(caught.value)
    assert isinstance(caught.value, ValueError)


def test_one_check_can_alarm_but_not_name():
    # an invented splitter: feed = light + heavy, 6.5 sigma apart
    f = np.array([[1.0, -1.0, -1.0]]) / 1.2689
    p = np.array([6.5])
    alone = explanations(p, f, fault_rate=0.02, size_prior=5.0, max_faults=0)
    assert alone.listed == ()
    assert verdict(alone).conclusion is Conclusion.CANNOT_TELL
    listed = explanations(p, f, fault_rate=0.02, size_prior=5.0, max_faults=1, saturated=True)
    (only,) = listed.listed
    assert len(only.members) == 3
    assert only.leftover == pytest.approx(0, abs=1e-12)
    assert np.isnan(only.limit)
    assert {Reason.TIED, Reason.SATURATED} <= set(verdict(listed).reasons)


def test_without_checks_nothing_is_said():
    found = explanations(np.zeros(0), np.zeros((0, 3)), fault_rate=0.02, size_prior=1.0, max_faults=2)
    assert found.evidence is Evidence.NO_CHECK
    assert verdict(found).conclusion is Conclusion.NO_CHECK
    assert found.candidate == pytest.approx(np.full(3, 0.02))


def test_agreement_is_called_so():
    found = explain(SKID, [50.2, 149.9, 200.3, 39.9, 160.2, 10.1], 2)
    assert verdict(found).conclusion is Conclusion.AGREES
    assert found.at_least == 0
    assert not any(e.minimal for e in found.listed)


@pytest.mark.parametrize(
    ("p", "word"), [(0.06, "agrees"), (0.04, "watch"), (0.002, "watch"), (0.0009, "does not agree")]
)
def test_words_of_the_evidence(p, word):
    f = np.eye(3)
    parity = np.array([1.0, 1.0, 1.0]) * np.sqrt(chi2.isf(p, 3) / 3)
    assert explanations(parity, f, fault_rate=0.01, size_prior=5.0, max_faults=1).evidence.value == word


def test_evidence_that_no_candidate_reaches_has_no_explanation():
    f = np.eye(4)[:, :2]
    found = explanations(np.array([0, 0, 9.0, 0]), f, fault_rate=0.02, size_prior=5.0, max_faults=2)
    said = verdict(found)
    assert said.conclusion is Conclusion.NOT_FOUND
    assert said.at_least == 3


@pytest.mark.parametrize(
    ("change", "code"),
    [
        ({"sides": [2, 0, 0, 0, 0, 0]}, "sides-not-signs"),
        ({"fault_rate": 1.0}, "fault-rate-out-of-range"),
        ({"fault_rate": float("nan")}, "fault-rate-out-of-range"),
        ({"size_prior": 0.0}, "size-prior-not-positive"),
        ({"level": 0.0}, "level-out-of-range"),
        ({"max_faults": -1}, "too-many-faults"),
    ],
)
def test_settings_that_mean_nothing_are_refused(change, code):
    setting = {"fault_rate": 0.02, "size_prior": 5.0, "max_faults": 1} | change
    with pytest.raises(Refusal) as caught:
        explanations(SKID.parity(SKID_R_HIGH), SKID.biases, **setting)
    assert caught.value.code == code


@pytest.mark.parametrize("parity", [np.zeros(2), np.array([1.0, np.nan, 0.0])])
def test_a_parity_vector_that_does_not_fit_is_refused(parity):
    with pytest.raises(Refusal, match="parity-not-usable"):
        explanations(parity, SKID.biases, fault_rate=0.02, size_prior=5.0, max_faults=1)


def test_a_fault_of_rate_zero_is_never_probable():
    rate = np.full(6, 0.02)
    rate[1] = 0.0
    found = explain(SKID, SKID_R_HIGH, 2, rate=rate)
    assert found.candidate[1] == 0
    assert by_names(SKID, found, 1)["R"][0].survives
