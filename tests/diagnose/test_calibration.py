"""Stated probabilities come true, and explanations beside the step-by-step methods on the same trials."""

import numpy as np
import pytest
from diagnose_networks import BYPASS, RECYCLE
from test_classical import draw as draw_biases

from reconcile.diagnose.classical import collective_compensation, serial_compensation, serial_elimination
from reconcile.diagnose.explain import Explainer
from reconcile.diagnose.lookalike import basis, same_space

NETS = {"bypass": BYPASS, "recycle": RECYCLE}


def prepare(net):
    """Biases of every meter and a loss at every node, each with its prior."""
    n, m = len(net.sigma), len(net.matrix)
    f = np.hstack([net.biases, net.leaks])
    sides = np.repeat([0, 1], [n, m])
    rate = np.repeat([0.05, 0.03], [n, m])
    spread = np.append(10 * net.sigma, np.full(m, 10 * net.sigma.max()))
    return Explainer(f, sides=sides, fault_rate=rate, size_prior=spread, max_faults=2)


def draw(explainer, trials, rng):
    """Trials from the priors; those with more than two faults are drawn again, as the model leaves them out."""
    k = explainer.rate.size
    present = rng.random((4 * trials, k)) < explainer.rate
    present = present[present.sum(axis=1) <= explainer.max_faults][:trials]
    size = rng.normal(size=present.shape) * explainer.size_prior
    size = np.where(explainer.sides == 0, size, explainer.sides * np.abs(size))
    return present, rng.normal(size=(trials, explainer.checks)) + (present * size) @ explainer.signatures.T


def check_reliability(network, trials, seed):
    explainer = prepare(NETS[network])
    rng = np.random.default_rng(seed)
    present, parity = draw(explainer, trials, rng)
    probability, came_true = [], []
    for truth, p in zip(present, parity, strict=True):
        sets, q = explainer.posterior(p)
        probability.append(q)
        came_true.append([s == tuple(np.flatnonzero(truth)) for s in sets])
    q, hit = np.concatenate(probability), np.concatenate(came_true)
    assert hit.sum() == trials  # the truth is one of the sets, once
    bins = np.minimum((q * 10).astype(int), 9)
    filled = 0
    for b in range(10):
        mine = bins == b
        expected, variance = q[mine].sum(), (q[mine] * (1 - q[mine])).sum()
        if variance < 3:
            continue
        filled += 1
        # sets of one trial exclude each other, so the binomial variance is an upper bound
        assert abs(hit[mine].sum() - expected) < 3.5 * np.sqrt(variance), (network, b, hit[mine].sum(), expected)
    assert filled >= 8


@pytest.mark.parametrize("network", NETS)
def test_stated_probabilities_come_true(network):
    check_reliability(network, 600, 12)


@pytest.mark.slow
@pytest.mark.parametrize("network", NETS)
def test_stated_probabilities_come_true_in_many_trials(network):
    check_reliability(network, 30_000, 99)


def by_class(explainer, flags):
    """Whether any candidate of each look-alike class is flagged."""
    return np.stack([flags[:, list(m)].any(axis=1) for m in explainer.alike.members], axis=1)


def side_by_side(network, trials, seed):
    """Brier score, share of faults identified and wrong flags per trial, all scored by look-alike class."""
    explainer = prepare(NETS[network])
    rng = np.random.default_rng(seed)
    present, parity = draw(explainer, trials, rng)
    truth = by_class(explainer, present)
    chance, named = np.zeros(truth.shape), np.zeros(present.shape, dtype=bool)
    for i, p in enumerate(parity):
        sets, q = explainer.posterior(p)
        for s, share in zip(sets, q, strict=True):
            chance[i, list({explainer.alike.label[c] for c in s})] += share
        named[i, list(sets[np.argmax(q)])] = True
    told = {
        "explanations": (chance, by_class(explainer, named)),
        "elimination": (None, by_class(explainer, serial_elimination(parity, explainer.signatures).flagged)),
        "compensation": (None, by_class(explainer, serial_compensation(parity, explainer.signatures).flagged)),
    }
    score = {}
    for name, (stated, flags) in told.items():
        brier = np.mean(((flags if stated is None else stated) - truth.astype(float)) ** 2)
        score[name] = brier, (flags & truth).sum() / truth.sum(), (flags & ~truth).sum() / trials
    return score


def check_side_by_side(network, trials, seed):
    score = side_by_side(network, trials, seed)
    ours = score["explanations"]
    for name in ("elimination", "compensation"):
        theirs = score[name]
        assert ours[0] < 0.8 * theirs[0]  # a yes or no cannot be as near to the truth as a probability
        assert ours[2] < 0.8 * theirs[2]  # fewer wrong flags
        assert ours[1] > theirs[1] - 0.04  # at hardly any cost in faults identified
    return score


@pytest.mark.parametrize("network", NETS)
def test_explanations_beside_serial_methods(network):
    check_side_by_side(network, 600, 5)


@pytest.mark.slow
@pytest.mark.parametrize("network", NETS)
def test_explanations_beside_serial_methods_in_many_trials(network):
    for name, (brier, identified, wrong) in check_side_by_side(network, 20_000, 6).items():
        print(f"{network:8} {name:13} Brier {brier:.4f}  identified {identified:.3f}  wrong flags {wrong:.3f}")  # noqa: T201


# Gross biases of 5 to 25 sigmas on meters only, not drawn from the priors. Right: the flagged set spans the space of
# the true one, so that an equivalent set counts. At 2000 trials, explanations against elimination, serial and
# collective compensation: right .95 .94 .95 .95 for one bias in the recycle network, .81 .76 .72 .74 for two, .58 .54
# .52 .50 for three; wrong flags per trial .02 .04 .04 .04, .22 .43 .47 .42 and .49 .86 .93 .84. In the bypass network,
# where hardly any set is equivalent to another, collective compensation is as good for two biases (.92 against .91).


def spaces_found(net, count, trials, seed):
    true, parity = draw_biases(net, count, trials, np.random.default_rng(seed))
    explainer = Explainer(net.biases, fault_rate=0.05, size_prior=10 * net.sigma, max_faults=3)
    named = np.zeros_like(true)
    for i, p in enumerate(parity):
        sets, q = explainer.posterior(p)
        named[i, list(sets[np.argmax(q)])] = True
    methods = (serial_elimination, serial_compensation, collective_compensation)
    told = {"explanations": named} | {m.__name__: m(parity, net.biases).flagged for m in methods}
    out = {}
    for name, flags in told.items():
        pairs = zip(true, flags, strict=True)
        right = sum(same_space(basis(net.biases[:, a]), basis(net.biases[:, b])) for a, b in pairs) / trials
        out[name] = right, (flags & ~true).sum() / trials
    return out


def check_spaces(count, trials, seed):
    found = spaces_found(RECYCLE, count, trials, seed)
    right, wrong = found.pop("explanations")
    for theirs_right, theirs_wrong in found.values():
        assert right > theirs_right - 0.005 * (count == 1)
        assert wrong < 0.75 * theirs_wrong


@pytest.mark.parametrize("count", [1, 2])
def test_several_gross_biases_where_sets_are_equivalent(count):
    check_spaces(count, 500, 31)


@pytest.mark.slow
@pytest.mark.parametrize("count", [1, 2, 3])
def test_several_gross_biases_where_sets_are_equivalent_in_many_trials(count):
    check_spaces(count, 5000, 32)
