"""Robust estimates: against a general solver, published locations, and their optimality conditions."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import minimize

from reconcile.adjust.dense import prepare
from reconcile.adjust.robust import HAMPEL, HUBER, WELSCH, psi, rho, robust

LOSSES = ("huber", "welsch", "hampel")


def projector(balances, sigma):
    """G of the kernel: signatures times sigmas, orthonormal columns."""
    adjuster = prepare(np.asarray(balances, dtype=float), np.zeros((len(balances), 0)), np.asarray(sigma, dtype=float))
    return (adjuster.signatures * adjuster.sigma).T


def location(values, sigma):
    """Several readings of one thing: x1 - x2 = 0, x1 - x3 = 0, ..."""
    n = len(values)
    balances = np.hstack([np.ones((n - 1, 1)), -np.eye(n - 1)])
    g = projector(balances, np.full(n, sigma))
    found = robust((np.asarray(values) / sigma)[None] @ g, g, "huber")
    x = np.asarray(values) - sigma * found.residual[0]
    assert np.ptp(x) < 1e-9
    return x[0], found


def spoilt(seed, g, count=400, share=0.08):
    """Parity vectors of snapshots with several gross errors of 4 to 30 sigma."""
    rng = np.random.default_rng(seed)
    e = rng.normal(size=(count, len(g)))
    wrong = rng.random(e.shape) < share
    e[wrong] += rng.choice([-1, 1], wrong.sum()) * rng.uniform(4, 30, wrong.sum())
    return e @ g, e


SKID = projector([[1, 1, -1, 0, 0, 0], [0, 0, 1, -1, -1, 0], [0, -1, 0, 0, 1, -1]], [0.5, 1.5, 2, 0.4, 1.6, 0.2])
WIDE = np.linalg.qr(np.random.default_rng(0).normal(size=(14, 6)))[0]
NETS = {
    "skid": SKID,
    "wide": WIDE,
    "location": projector(np.hstack([np.ones((8, 1)), -np.eye(8)]), np.linspace(1, 3, 9)),
}

# Copper in wholemeal flour, 24 determinations in parts per million (Analytical Methods Committee 1989, Analyst 114, 1693).
FLOUR = [2.9, 3.1, 3.4, 3.4, 3.7, 3.7, 2.8, 2.5, 2.4, 2.4, 2.7, 2.2,
         5.28, 3.37, 3.03, 3.03, 28.95, 3.77, 3.4, 2.2, 3.5, 3.6, 3.7, 3.7]  # fmt: skip


# ------------------------------------------------------------------ published


@pytest.mark.parametrize(("scale", "published"), [(0.526323, 3.206724), (0.673652, 3.205498)])
def test_huber_location_of_the_flour_data(scale, published):
    """Venables & Ripley, Modern Applied Statistics with S, 4th edition, section 5.5, bend 1.5; figures from memory.

    The first scale is the median absolute deviation, the second Huber's own. Their bend of 1.5 scales is ours of
    1.345 sigmas when sigma is 1.5/1.345 scales.
    """
    found, _ = location(FLOUR, scale * 1.5 / HUBER)
    assert found == pytest.approx(published, abs=2e-6)
    influence = np.clip((np.array(FLOUR) - found) / scale, -1.5, 1.5)
    assert abs(influence.sum()) < 1e-9


def test_the_first_scale_is_the_median_absolute_deviation():
    assert 1.4826 * np.median(np.abs(FLOUR - np.median(FLOUR))) == pytest.approx(0.526323, abs=1e-6)


def test_constants_give_the_stated_efficiency():
    """95 % at the normal distribution (Holland & Welsch 1977): (E psi')^2 / E psi^2, by quadrature."""
    x = np.linspace(-12, 12, 400_001)
    density = np.exp(-0.5 * x**2) / np.sqrt(2 * np.pi)
    for loss in ("huber", "welsch"):
        influence = psi(x, loss)
        slope = np.gradient(influence, x)
        step = x[1] - x[0]
        efficiency = (slope * density).sum() ** 2 * step**2 / ((influence**2 * density).sum() * step)
        assert efficiency == pytest.approx(0.95, abs=5e-5)


# ------------------------------------------------------------------ against a general solver


@pytest.mark.parametrize("net", NETS)
def test_huber_is_the_optimum_of_a_general_solver(net):
    g = NETS[net]
    parity, _ = spoilt(1, g, count=30)
    found = robust(parity, g, "huber")
    free = np.linalg.svd(g)[0][:, g.shape[1] :]
    assert found.unique.mean() > 0.8
    for t, residual, unique in zip(parity, found.residual, found.unique, strict=True):
        start = g @ t
        best = minimize(
            lambda z, start=start: rho(start + free @ z, "huber").sum(),
            np.zeros(free.shape[1]),
            jac=lambda z, start=start: free.T @ psi(start + free @ z, "huber"),
            method="BFGS",
            options={"gtol": 1e-10, "maxiter": 5000},
        )
        assert rho(residual, "huber").sum() <= best.fun + 1e-9
        assert not unique or residual == pytest.approx(start + free @ best.x, abs=2e-5)


@pytest.mark.parametrize("net", NETS)
@pytest.mark.parametrize("loss", LOSSES)
def test_every_snapshot_meets_the_conditions_of_an_optimum(net, loss):
    g = NETS[net]
    parity, _ = spoilt(2, g)
    found = robust(parity, g, loss)
    assert found.optimal.all()
    assert found.residual @ g == pytest.approx(parity, abs=1e-9)
    # Nothing that the balances leave free changes the loss to first order.
    free = np.linalg.svd(g)[0][:, g.shape[1] :]
    assert np.abs(psi(found.residual, loss) @ free).max() < 1e-8
    assert found.shift == pytest.approx(found.residual - psi(found.residual, loss), abs=1e-12)


@pytest.mark.parametrize("loss", ["welsch", "hampel"])
@pytest.mark.parametrize("net", NETS)
def test_redescending_estimates_lie_downhill_of_huber_and_next_to_nothing_better(net, loss):
    g = NETS[net]
    parity, _ = spoilt(3, g, count=100)
    start, found = robust(parity, g, "huber").residual, robust(parity, g, loss).residual
    there = rho(found, loss).sum(axis=1)
    assert (there <= rho(start, loss).sum(axis=1) + 1e-12).all()
    free = np.linalg.svd(g)[0][:, g.shape[1] :]
    rng = np.random.default_rng(4)
    for _ in range(20):
        near = found + 1e-4 * rng.normal(size=(len(found), free.shape[1])) @ free.T
        assert (rho(near, loss).sum(axis=1) >= there - 1e-9).all()


def test_the_violation_is_found_where_the_answer_is_wrong():
    from reconcile.adjust.robust import _violation

    parity, _ = spoilt(5, SKID, count=20)
    right = robust(parity, SKID, "huber").residual
    least_squares = parity @ SKID.T
    moved = _violation(least_squares, parity, SKID, "huber")
    assert _violation(right, parity, SKID, "huber").max() < 1e-9
    assert ((moved > 1e-9) == (np.abs(least_squares) > HUBER).any(axis=1)).all()
    assert 0 < (moved > 1e-9).sum() < 20
    assert (_violation(right + 0.1, parity, SKID, "huber") > 1e-2).all()


# ------------------------------------------------------------------ what it is for


def test_without_outliers_huber_is_least_squares():
    parity = 0.3 * np.random.default_rng(6).normal(size=(50, 3))
    found = robust(parity, SKID, "huber")
    assert found.residual == pytest.approx(parity @ SKID.T, abs=1e-12)
    assert (found.shift == 0).all()


def test_one_gross_error_is_shed_by_redescending_losses_and_bounded_by_huber():
    errors = np.zeros((3, 9))
    errors[:, 2] = [10, 100, 1000]
    g = NETS["location"]
    off = {loss: np.abs(robust(errors @ g, g, loss).residual - errors).max(axis=1) for loss in LOSSES}
    assert off["huber"][2] == pytest.approx(off["huber"][1], abs=1e-9)
    assert off["welsch"].max() < 0.01
    assert off["hampel"].max() < 1e-9
    assert np.abs(errors - errors @ g @ g.T)[0].max() > 1


def test_where_several_readings_can_share_an_error_other_values_fit_as_well():
    """Feed, discharge and permeate lie on one cycle: with all three at the bend their errors can be exchanged."""
    parity, _ = spoilt(1, SKID, count=200, share=0.2)
    found = robust(parity, SKID, "huber")
    loss = rho(found.residual, "huber").sum(axis=1)
    several, one = np.flatnonzero(~found.unique), np.flatnonzero(found.unique)
    assert several.size > 5
    assert one.size > 100
    for i in several:
        beyond = np.flatnonzero(np.abs(found.residual[i]) >= HUBER - 1e-9)
        exchange = np.zeros(6)
        exchange[beyond] = np.linalg.svd(SKID[beyond].T)[2][-1]
        assert np.abs(exchange @ SKID).max() < 1e-9
        other = [rho(found.residual[i] + step * exchange, "huber").sum() for step in (-1e-3, 1e-3)]
        assert min(other) == pytest.approx(loss[i], abs=1e-10)
    free = np.linalg.svd(SKID)[0][:, 3:]
    rng = np.random.default_rng(9)
    for _ in range(50):
        direction = rng.normal(size=(one.size, 3)) @ free.T
        assert (rho(found.residual[one] + 0.1 * direction, "huber").sum(axis=1) > loss[one] + 1e-9).all()


def test_unchecked_readings_keep_their_values():
    g = np.vstack([SKID, np.zeros((1, 3))])
    parity, _ = spoilt(7, SKID, count=40)
    for loss in LOSSES:
        found = robust(parity, g, loss)
        assert (found.residual[:, -1] == 0).all()
        assert found.residual[:, :-1] == pytest.approx(robust(parity, SKID, loss).residual, abs=1e-7)


def test_nothing_depends_on_who_stands_beside():
    parity, _ = spoilt(8, WIDE, count=60)
    for loss in LOSSES:
        together = robust(parity, WIDE, loss).residual
        for i in (0, 17, 59):
            assert robust(parity[i : i + 1], WIDE, loss).residual[0] == pytest.approx(together[i], abs=1e-7)


def test_snapshots_without_checks_or_without_rows():
    for loss in LOSSES:
        assert robust(np.zeros((0, 3)), SKID, loss).residual.shape == (0, 6)
        none = robust(np.zeros((2, 0)), np.zeros((4, 0)), loss)
        assert (none.residual == 0).all()
        assert none.optimal.all()


@pytest.mark.parametrize("loss", LOSSES)
def test_influence_is_the_slope_of_the_loss(loss):
    e = np.linspace(-12, 12, 2001)
    bends = {"huber": [HUBER], "welsch": [], "hampel": list(HAMPEL)}[loss]
    smooth = np.all([np.abs(np.abs(e) - b) > 0.02 for b in bends], axis=0) if bends else np.ones(e.shape, dtype=bool)
    slope = (rho(e + 1e-6, loss) - rho(e - 1e-6, loss)) / 2e-6
    assert slope[smooth] == pytest.approx(psi(e, loss)[smooth], abs=1e-8)
    assert rho(np.zeros(1), loss)[0] == 0
    assert pytest.approx(2.985, abs=1e-3) == WELSCH
