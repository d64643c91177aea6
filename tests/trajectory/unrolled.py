"""The same sequence written out as one snapshot with a copy of the variables per window, for the one-snapshot solver."""

from __future__ import annotations

import numpy as np
import scipy.sparse as sp

from reconcile.adjust.solve import Problem, solve
from reconcile.system import Equations


def unrolled(chain, readings):
    """Problem of the whole sequence; column of window t is t * n + column."""
    size, n, k = len(readings), chain.window.start.size, chain.window.columns.size

    def equations(values):
        parts = [chain.window.equations(v) for v in values.reshape(size, k)]
        assert not any(p.calls for p in parts)
        links, q = [], chain.inventories.size
        for t in range(size - 1):
            tied = t + 1 if chain.at_end else t
            rows = sp.lil_array((q + chain.constants.size, size * n))
            for j, (inventory, rate) in enumerate(zip(chain.inventories, chain.rates, strict=True)):
                rows[j, (t + 1) * n + inventory], rows[j, t * n + inventory] = 1.0, -1.0
                rows[j, tied * n + rate] = -chain.gains[tied, j]
            for j, column in enumerate(chain.constants):
                rows[q + j, (t + 1) * n + column], rows[q + j, t * n + column] = 1.0, -1.0
            links.append(rows.tocsr())
        linear = sp.csr_array(sp.vstack([sp.block_diag([p.linear for p in parts], format="csr"), *links]))
        extra = linear.shape[0] - sum(p.shape[0] for p in parts)
        products = sp.block_diag([p.products for p in parts], format="csr")
        products = sp.csr_array(sp.vstack([products, sp.csr_array((extra, products.shape[1]))]))
        pairs = np.concatenate([p.pairs + t * n for t, p in enumerate(parts)])
        return Equations(linear, np.concatenate([*(p.rhs for p in parts), np.zeros(extra)]), products, pairs)

    w = chain.window
    return Problem(
        equations=equations,
        sigma=lambda v: np.concatenate([w.sigma(x) for x in v.reshape(size, k)]),
        columns=np.concatenate([w.columns + t * n for t in range(size)]),
        readings=readings.ravel(),
        fixed=np.concatenate([w.fixed + t * n for t in range(size)]).astype(np.int64),
        start=np.tile(w.start, size),
        value_dependent=w.value_dependent,
        settle=w.settle,
        lower=np.tile(w.lower, size),
        upper=np.tile(w.upper, size),
    )


def solve_unrolled(chain, readings, lasting=(), start=None):
    """Values (N, n), their standard deviations, which are determined, parity, and signatures of lasting faults.

    `lasting` holds pairs (reading, column), one of them -1.
    """
    size, n, k = len(readings), chain.window.start.size, chain.window.columns.size
    s = solve(unrolled(chain, readings), names=str, row_names=str)
    a = s.adjuster
    spread, determined = np.zeros(size * n), np.ones(size * n, dtype=bool)
    measured = np.concatenate([chain.window.columns + t * n for t in range(size)])[s.present]
    spread[measured] = np.linalg.norm(a.cover, axis=1)
    spread[s.free] = np.linalg.norm(a.cover_unmeasured, axis=1)
    determined[s.free] = a.observable
    signatures = []
    for reading, column in lasting:
        if reading >= 0:
            here = np.isin(s.present, [t * k + reading for t in range(size)])
            signatures.append(a.signatures[:, here].sum(axis=1))
        else:
            signatures.append(a.signature_of_columns(s.jacobian[:, [t * n + column for t in range(size)]]).sum(axis=1))
    found = np.array(signatures).T if signatures else np.zeros((s.parity.size, 0))
    return s.x.reshape(size, n), spread.reshape(size, n), determined.reshape(size, n), s.parity, found
