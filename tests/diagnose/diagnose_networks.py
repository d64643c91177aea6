"""Small networks for the tests of diagnosis: balances, sigmas, and the parity space by a Cholesky factor."""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cholesky, solve_triangular


@dataclass(frozen=True)
class Net:
    """Streams all measured; p = L^-1 (A y) with L L' = A diag(sigma^2) A'."""

    streams: tuple[str, ...]
    matrix: np.ndarray
    sigma: np.ndarray

    @property
    def factor(self):
        return cholesky((self.matrix * self.sigma**2) @ self.matrix.T, lower=True)

    def whiten(self, closure):
        return solve_triangular(self.factor, closure, lower=True)

    def parity(self, reading):
        return self.whiten(self.matrix @ np.asarray(reading, dtype=float))

    @property
    def biases(self):
        return self.whiten(self.matrix)

    @property
    def leaks(self):
        """What is lost at a node is missing at its outlets: in - out = loss."""
        return self.whiten(np.eye(len(self.matrix)))


def _net(names, arcs, sigma):
    nodes = sorted({n for a in arcs for n in a} - {"out"})
    a = np.zeros((len(nodes), len(arcs)))
    for j, (start, end) in enumerate(arcs):
        if start != "out":
            a[nodes.index(start), j] -= 1
        if end != "out":
            a[nodes.index(end), j] += 1
    return Net(tuple(names), a, np.asarray(sigma, dtype=float))


# An invented membrane skid with recycle: feed F and recycle R meet, D is pumped to the module, P permeate, T retentate,
# B bleed. Expected figures were computed independently with a normal-equations solver.
SKID = Net(
    ("F", "R", "D", "P", "T", "B"),
    np.array([[1, 1, -1, 0, 0, 0], [0, 0, 1, -1, -1, 0], [0, -1, 0, 0, 1, -1]], dtype=float),
    np.array([0.5, 1.5, 2.0, 0.4, 1.6, 0.2]),
)
SKID_R_HIGH = np.array([50.3, 158.6, 201.2, 39.8, 161.0, 10.1])
SKID_R_AND_P = np.array([50.3, 158.6, 201.2, 37.4, 161.0, 10.1])

# An invented crystalliser loop, the unmeasured purge projected out: feed F + recycle R = slurry S = crystals C +
# liquor L; the wash W is in no check.
LOOP = Net(
    ("F", "R", "S", "C", "L", "W"),
    np.array([[1, 1, -1, 0, 0, 0], [0, 0, 1, -1, -1, 0]], dtype=float),
    np.array([0.2, 0.4, 0.5, 0.2, 0.4, 0.05]),
)
LOOP_READING = np.array([20.4, 31.1, 49.0, 9.8, 39.3, 2.0])

# Heat exchanger with bypass, six flows and four nodes: Narasimhan & Jordache 2000, Data Reconciliation and Gross Error
# Detection (network and readings from memory; the figures were recomputed).
BYPASS = _net(
    ("F1", "F2", "F3", "F4", "F5", "F6"),
    [("out", "1"), ("1", "2"), ("1", "3"), ("2", "4"), ("3", "4"), ("4", "out")],
    np.ones(6),
)
BYPASS_READING = np.array([101.91, 68.45, 34.65, 64.2, 36.44, 98.88])

# Four units, seven streams: Rosenberg, Mah & Iordache 1987, Ind. Eng. Chem. Res. 26, 555 (incidence and flows from
# memory).
RECYCLE = _net(
    ("F1", "F2", "F3", "F4", "F5", "F6", "F7"),
    [("out", "1"), ("1", "2"), ("2", "3"), ("3", "1"), ("3", "4"), ("4", "1"), ("4", "out")],
    [0.125, 0.375, 0.375, 0.125, 0.25, 0.125, 0.125],
)

# Three units, six streams with exact biases in a cycle of three: Bagajewicz & Jiang 1998, Comput. Chem. Eng. 22, 1789;
# Jiang & Bagajewicz 1999, Ind. Eng. Chem. Res. 38, 2119 (readings from memory, topology reconstructed from them).
CYCLE = _net(
    ("S1", "S2", "S3", "S4", "S5", "S6"),
    [("out", "1"), ("1", "2"), ("2", "out"), ("3", "1"), ("2", "3"), ("3", "out")],
    np.ones(6),
)
CYCLE_READING = np.array([12.0, 18.0, 10.0, 4.0, 7.0, 2.0])
