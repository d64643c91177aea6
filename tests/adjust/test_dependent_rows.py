"""Rows that others imply, against elimination in exact fractions."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from reconcile.adjust.eliminate import dependent_rows


def exact(rows: np.ndarray) -> list[list[Fraction]]:
    """Each row that follows from earlier ones, as the combination of independent earlier rows that vanishes."""
    basis: list[tuple[int, list[Fraction], dict[int, Fraction]]] = []
    out = []
    for k, row in enumerate(rows):
        rest, used = [Fraction(int(v)) for v in row], {k: Fraction(1)}
        for pivot, other, how in basis:
            factor = rest[pivot] / other[pivot]
            rest = [a - factor * b for a, b in zip(rest, other, strict=True)]
            for i, v in how.items():
                used[i] = used.get(i, Fraction(0)) - factor * v
        lead = next((j for j, v in enumerate(rest) if v), None)
        if lead is None:
            out.append([used.get(i, Fraction(0)) for i in range(len(rows))])
        else:
            basis.append((lead, rest, used))
    return out


CASES = {
    "few rows imply many": lambda rng: rng.integers(-2, 3, (40, 3)) @ rng.integers(-1, 2, (3, 8)),
    "many rows imply few": lambda rng: np.vstack([a := rng.integers(-1, 2, (12, 20)), a[:3].sum(axis=0)]),
    "sets of rows that share nothing": lambda rng: np.kron(np.eye(5, dtype=int), rng.integers(-1, 2, (4, 3))),
    "balances that say nothing": lambda rng: np.where(rng.random((30, 1)) < 0.5, 0, rng.integers(-1, 2, (30, 6))),
    "the same balance again and again": lambda rng: np.ones((25, 1), dtype=int) @ rng.integers(1, 3, (1, 4)),
    "no variable at all": lambda rng: np.zeros((3, 0), dtype=int),
}


@pytest.mark.parametrize("seed", range(5))
@pytest.mark.parametrize("kind", CASES)
def test_combinations_are_those_of_exact_elimination(kind, seed):
    rows = CASES[kind](np.random.default_rng(seed))
    expected = exact(rows)
    found = dependent_rows(rows.astype(float))
    assert found.shape == (len(expected), len(rows))
    if expected:
        np.testing.assert_allclose(found, np.array(expected, dtype=float), rtol=1e-9, atol=1e-11)
        assert np.array_equal(found != 0, np.array(expected, dtype=float) != 0)
