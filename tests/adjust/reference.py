"""An independent reference: the full Lagrange system in 50-digit arithmetic, nothing projected, nothing factorised twice.

minimise sum ((y - x) / sigma)^2 subject to A_m x + A_u u = b. With H = diag(1 / sigma^2, 0) and A = [A_m A_u] the
inverse of [[H, A'], [A, 0]] holds the covariance of (x, u) in its upper left block. Every double is taken as the exact
number that it is. Rows that others imply are left out and undetermined unmeasured variables set to zero beforehand,
both found by elimination with complete pivoting at the same 50 digits.
"""

from dataclasses import dataclass

import mpmath
import numpy as np

DIGITS = 50
ZERO = mpmath.mpf(10) ** -35
"""What is smaller than this times the largest entry is zero at 50 digits, and nothing that a double states is."""


@dataclass(frozen=True)
class Reference:
    """Adjusted snapshot; arrays rounded to doubles at the very end."""

    x: np.ndarray
    u: np.ndarray
    observable: np.ndarray
    covariance: np.ndarray
    """Of (x, u); rows of undetermined unmeasured variables mean nothing."""
    objective: float
    checks: int
    z: np.ndarray
    """Adjustment over its own spread, reading - adjusted; nan where nothing checks the reading."""
    checked: np.ndarray


def to_mp(array):
    return [[mpmath.mpf(float(v)) for v in row] for row in np.atleast_2d(array)]


def echelon(rows, width):
    """Reduced echelon form by complete pivoting: pivot rows (positions), pivot columns, rows themselves."""
    rows = [r[:] for r in rows]
    size = [max((abs(v) for v in r[:width]), default=mpmath.mpf(0)) for r in rows]
    rows = [[v / s for v in r] if s else r for r, s in zip(rows, size, strict=True)]
    left, used, pivots = list(range(len(rows))), [], []
    while left:
        best = max(((abs(rows[i][j]), i, j) for i in left for j in range(width)), default=(0, 0, 0))
        if best[0] <= ZERO:
            break
        _, i, j = best
        pivot = rows[i][j]
        rows[i] = [v / pivot for v in rows[i]]
        for k in range(len(rows)):
            factor = rows[k][j]
            if k != i and factor:
                rows[k] = [a - factor * b for a, b in zip(rows[k], rows[i], strict=True)]
        left.remove(i)
        used.append(i)
        pivots.append(j)
    return used, pivots, rows


def independent(rows):
    """Positions of rows that no others imply."""
    used, _, _ = echelon(rows, len(rows[0])) if rows and rows[0] else ([], [], [])
    return sorted(used)


def reference(measured, unmeasured, sigma, y, rhs) -> Reference:
    with mpmath.workdps(DIGITS):
        return _reference(measured, unmeasured, sigma, y, rhs)


def _reference(measured, unmeasured, sigma, y, rhs):
    m, n = measured.shape
    n_u = unmeasured.shape[1]
    am, au = to_mp(measured) if n else [[]] * m, to_mp(unmeasured) if n_u else [[] for _ in range(m)]
    b = [mpmath.mpf(float(v)) for v in rhs]
    s = [mpmath.mpf(float(v)) for v in sigma]
    reading = [mpmath.mpf(float(v)) for v in y]

    used, pivots, reduced = echelon(au, n_u) if n_u else ([], [], [])
    others = [j for j in range(n_u) if j not in pivots]
    observable = np.zeros(n_u, dtype=bool)
    for i, j in zip(used, pivots, strict=True):
        observable[j] = all(abs(reduced[i][k]) <= ZERO for k in others)
    kept_u = sorted(pivots)
    whole = [[*a, *(w[j] for j in kept_u)] for a, w in zip(am, au, strict=True)]
    kept = independent(whole)
    q, k = n + len(kept_u), len(kept)
    system = mpmath.zeros(q + k)
    right = mpmath.zeros(q + k, 1)
    # Variables in units of sigma and rows to largest entry 1: 50 digits need no more scaling than that.
    scale = [*s, *([mpmath.mpf(1)] * len(kept_u))]
    for j in range(n):
        system[j, j] = 1
        right[j] = reading[j] / s[j]
    for i, row in enumerate(kept):
        size = max(abs(v * t) for v, t in zip(whole[row], scale, strict=True))
        for j in range(q):
            system[q + i, j] = system[j, q + i] = whole[row][j] * scale[j] / size
        right[q + i] = b[row] / size
    inverse = system**-1
    answer = inverse * right
    value = [answer[j] * scale[j] for j in range(q)]
    u = [mpmath.mpf(0)] * n_u
    place = {j: n + p for p, j in enumerate(kept_u)}
    for j, p in place.items():
        u[j] = value[p]
    covariance = np.zeros((n + n_u, n + n_u))
    where = [*range(n), *(n + j for j in kept_u)]
    for a, i in enumerate(where):
        for c, j in enumerate(where):
            covariance[i, j] = float(inverse[a, c] * scale[a] * scale[c])
    # Checked is a matter of structure: what is left of a reading's column when the unmeasured are eliminated.
    _, _, left = echelon([[*w, *a] for a, w in zip(am, au, strict=True)], n_u)
    rest = [left[i][n_u:] for i in range(m) if i not in used]
    checked = np.array([any(abs(row[j]) > ZERO for row in rest) for j in range(n)], dtype=bool)
    adjustment = [(reading[j] - value[j]) / s[j] for j in range(n)]
    share = [1 - inverse[j, j] for j in range(n)]
    z = [float(a / mpmath.sqrt(h)) if c else np.nan for a, h, c in zip(adjustment, share, checked, strict=True)]
    return Reference(
        x=np.array([float(v) for v in value[:n]]),
        u=np.array([float(v) for v in u]),
        observable=observable,
        covariance=covariance,
        objective=float(sum(a * a for a in adjustment)),
        checks=k - len(kept_u),
        z=np.array(z),
        checked=checked,
    )
