"""Whether a stretch of readings is steady, and how sure its mean is.

Arrays in, numbers out. Symbols: x (n,) readings at equal steps, NaN-free.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = [
    "R_CRITICAL",
    "RTest",
    "SlopeTest",
    "autocorrelation_time",
    "mean_sigma",
    "r_statistic",
    "r_test",
    "slope_test",
]

# Upper critical values of R for independent normal noise: {(l1, l2, l3): {level: value}}. Method: Cao S., Rhinehart
# R.R. (1995), J. Process Control 5(6), 363-374. The figures are a Monte Carlo simulation of 4000 series (about
# 0.005 at the 5 % level, 0.02 at the 0.5 % level); the published 1.44 for (0.2, 0.1, 0.1) at 5 % agrees (recalled
# from memory).
R_CRITICAL: dict[tuple[float, float, float], dict[float, float]] = {
    (0.2, 0.1, 0.1): {0.10: 1.317, 0.05: 1.441, 0.025: 1.563, 0.01: 1.734, 0.005: 1.864},
    (0.1, 0.1, 0.1): {0.10: 1.350, 0.05: 1.492, 0.025: 1.635, 0.01: 1.834, 0.005: 1.985},
    (0.05, 0.05, 0.05): {0.10: 1.237, 0.05: 1.325, 0.025: 1.409, 0.01: 1.520, 0.005: 1.604},
    (0.2, 0.2, 0.2): {0.10: 1.509, 0.05: 1.742, 0.025: 1.982, 0.01: 2.334, 0.005: 2.627},
    (0.1, 0.05, 0.05): {0.10: 1.228, 0.05: 1.311, 0.025: 1.391, 0.01: 1.495, 0.005: 1.573},
    (0.05, 0.1, 0.1): {0.10: 1.369, 0.05: 1.523, 0.025: 1.678, 0.01: 1.895, 0.005: 2.066},
}


def r_statistic(
    x: npt.NDArray[np.float64], lambdas: tuple[float, float, float] = (0.2, 0.1, 0.1)
) -> npt.NDArray[np.float64]:
    """Return the ratio of two filtered variances, sample by sample (Cao & Rhinehart 1995).

    ``xf += l1 (x - xf)``; ``v2 = l2 (x - xf_before)^2 + (1 - l2) v2``; ``d2 = l3 (x - x_before)^2 + (1 - l3) d2``;
    ``R = (2 - l1) v2 / d2``. It is near 1 when steady and grows when x moves. Start values come from the first
    tenth of the data (at least 5): its mean, its variance and its mean squared difference.

    Parameters
    ----------
    x : (n,) float64
        n >= 2.
    lambdas : (l1, l2, l3)

    Returns
    -------
    (n,) float64
        NaN where d2 is 0 (a flat line).
    """
    l1, l2, l3 = lambdas
    x = np.asarray(x, dtype=np.float64)
    head = x[: max(5, x.size // 10)]
    filtered = float(head.mean())
    # In the steady state E v2 = 2 s^2/(2 - l1), E d2 = 2 s^2: the filters start there.
    d2 = float(np.mean(np.diff(head) ** 2)) if head.size > 1 else 0.0
    v2 = d2 / (2.0 - l1)
    out = np.full(x.size, np.nan)
    previous = float(x[0])
    for i, value in enumerate(x.tolist()):
        v2 = l2 * (value - filtered) ** 2 + (1.0 - l2) * v2
        filtered += l1 * (value - filtered)
        if i:
            d2 = l3 * (value - previous) ** 2 + (1.0 - l3) * d2
        previous = value
        if d2 > 0.0:
            out[i] = (2.0 - l1) * v2 / d2
    return out


@dataclass(frozen=True)
class RTest:
    """Outcome of the R test at the end of a stretch.

    Attributes
    ----------
    r : float
        Value of R at the last sample; NaN for a flat line.
    limit : float
        Critical value at the level asked for.
    steady : bool
    """

    r: float
    limit: float
    steady: bool


def r_test(
    x: npt.NDArray[np.float64], lambdas: tuple[float, float, float] = (0.2, 0.1, 0.1), level: float = 0.01
) -> RTest:
    """Test whether the end of a stretch is steady.

    The noise has to be independent from sample to sample: autocorrelated noise inflates R, so sample more
    slowly than the noise is correlated.

    Raises
    ------
    ValueError
        For lambdas or a level that have no critical value.
    """
    if lambdas not in R_CRITICAL:
        raise ValueError(f"no critical values for lambdas {lambdas}; there are: {sorted(R_CRITICAL)}")
    if level not in R_CRITICAL[lambdas]:
        raise ValueError(f"no critical value at level {level}; there are: {sorted(R_CRITICAL[lambdas])}")
    r = float(r_statistic(x, lambdas)[-1])
    limit = R_CRITICAL[lambdas][level]
    return RTest(r, limit, bool(np.isnan(r) or r <= limit))


def autocorrelation_time(x: npt.NDArray[np.float64]) -> float:
    """Return the integrated autocorrelation time in samples, at least 1.

    ``tau = 1 + 2 sum rho_k``, the sum cut by the initial positive sequence: sums of neighbouring pairs
    ``rho_2m + rho_2m+1`` are added as long as they are positive (Geyer C.J. 1992, Statistical Science 7(4),
    473-483). The mean of n samples then varies as that of ``n / tau`` independent ones.

    Parameters
    ----------
    x : (n,) float64
    """
    n = x.size
    centred = np.asarray(x, dtype=np.float64) - np.mean(x)
    # A line that is flat to rounding says nothing of correlation.
    if n < 4 or float(np.max(np.abs(centred))) <= 1e-12 * float(np.max(np.abs(x)) or 1.0):
        return 1.0
    if n <= 256:
        covariance = np.correlate(centred, centred, "full")[n - 1 :]
    else:
        size = 1 << int(2 * n - 1).bit_length()
        spectrum = np.fft.rfft(centred, size)
        covariance = np.fft.irfft(spectrum * np.conj(spectrum), size)[:n]
    rho = covariance / covariance[0]
    pairs = rho[: n - n % 2].reshape(-1, 2).sum(axis=1)
    stop = np.flatnonzero(pairs <= 0.0)
    count = int(stop[0]) if stop.size else pairs.size
    return float(max(1.0, 2.0 * np.sum(pairs[:count]) - 1.0))


def mean_sigma(x: npt.NDArray[np.float64]) -> tuple[float, float, float]:
    """Return (mean, sigma of the mean from scatter, effective number of samples).

    Parameters
    ----------
    x : (n,) float64
        n >= 2.
    """
    n = x.size
    effective = n / autocorrelation_time(x)
    # The scatter about a mean of n_eff independent samples: the population variance is short by (1 - 1/n_eff).
    variance = float(np.var(x)) / max(1.0 - 1.0 / max(effective, 1.5), 1.0 / 3.0)
    return float(np.mean(x)), float(np.sqrt(variance / max(effective, 1.0))), effective


@dataclass(frozen=True)
class SlopeTest:
    """Straight line through a stretch.

    Attributes
    ----------
    slope : float
        Per unit of time.
    sigma : float
        Standard uncertainty of the slope, autocorrelation included.
    p_value : float
        Probability of a slope as far from 0, if there is none (Student's t, two-sided).
    change : float
        Rise over the whole stretch.
    """

    slope: float
    sigma: float
    p_value: float
    change: float


def slope_test(t: npt.NDArray[np.float64], x: npt.NDArray[np.float64]) -> SlopeTest:
    """Fit a straight line and test its slope.

    The variance of the slope is enlarged by the autocorrelation time of the residuals, and the degrees of freedom
    are ``n / tau - 2``.

    Parameters
    ----------
    t, x : (n,) float64
        n >= 3.
    """
    from scipy.special import stdtr

    n = t.size
    centred = t - t.mean()
    scale = float(centred @ centred)
    if n < 3 or scale == 0.0:
        return SlopeTest(0.0, np.inf, 1.0, 0.0)
    slope = float(centred @ x / scale)
    residual = x - x.mean() - slope * centred
    change = slope * float(t.max() - t.min())
    if float(np.max(np.abs(residual))) <= 1e-12 * float(np.max(np.abs(x)) or 1.0):
        moves = abs(change) > 1e-12 * float(np.max(np.abs(x)) or 1.0)
        return SlopeTest(slope, 0.0, 0.0 if moves else 1.0, change)
    tau = autocorrelation_time(residual)
    freedom = max(n / tau - 2.0, 1.0)
    # (RSS / n) (n_eff / (n_eff - 2)) tau / Sxx, with n_eff = n / tau
    sigma = float(np.sqrt(float(residual @ residual) / freedom / scale))
    p = 2.0 * float(stdtr(freedom, -abs(slope) / sigma))
    return SlopeTest(slope, sigma, p, change)
