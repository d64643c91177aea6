"""Whether true values lie inside stated intervals, and alarms come, at the stated rate: exact binomial bands.

Snapshots are independent; variables of one snapshot are not. So each variable, and the alarms, are counted over the
snapshots, and the risk of a false failure is divided among all counts.
"""

import numpy as np
from scipy import stats

RISK = 1e-3  # of one call, if all statements are right


def check_intervals(truth, adjusted, sigmas, *, level=0.95):
    """Arrays of shape (snapshots, variables); every column must hold the truth at the stated rate."""
    size, variables = adjusted.shape
    reach = stats.norm.ppf(0.5 + level / 2)
    inside = (np.abs(adjusted - truth) <= reach * sigmas).sum(axis=0)
    low, high = stats.binom.ppf([RISK / (2 * variables), 1 - RISK / (2 * variables)], size, level)
    assert inside.min() >= low, (int(inside.argmin()), inside.min(), low)
    assert inside.max() <= high, (int(inside.argmax()), inside.max(), high)
    # a band that could not fail would prove nothing: sigmas stated a quarter too small fall out of it
    assert stats.binom.cdf(low, size, 2 * stats.norm.cdf(0.75 * reach) - 1) > 0.9


def check_alarms(p_values, *, level=0.05):
    """The test of all readings rejects sound readings at its stated level."""
    alarms = int((p_values < level).sum())
    low, high = stats.binom.ppf([RISK / 2, 1 - RISK / 2], p_values.size, level)
    assert low <= alarms <= high, (alarms, low, high)


def columns(result, wanted):
    """Adjusted values and sigmas of these variables, shape (snapshots, len(wanted))."""
    at = [result.variables.index(name) for name in wanted]
    return result.adjusted[:, at], result.sigmas[:, at]
