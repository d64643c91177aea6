"""Critical values and detectable sizes against printed tables, scipy.stats and high-precision series."""

import math

import mpmath
import numpy as np
import pytest
from scipy.stats import chi2, ncx2, norm

from reconcile.diagnose.critical import (
    chi2_limit,
    chi2_p,
    expected_statistic_noncentrality,
    noncentrality,
    sidak_level,
    sidak_limit,
    smallest_detectable,
)
from reconcile.diagnose.refusal import Refusal

# Villadsen, Nielsen & Liden 2003, Bioreaction Engineering Principles, 2nd ed., Table 3.5 (read there).
LEVELS = (0.5, 0.75, 0.9, 0.95, 0.975, 0.99)
PRINTED_CHI2 = {
    1: ("0.46", "1.32", "2.71", "3.84", "5.02", "6.63"),
    2: ("1.39", "2.77", "4.61", "5.99", "7.38", "9.21"),
    3: ("2.37", "4.11", "6.25", "7.81", "9.35", "11.3"),
    4: ("3.36", "5.39", "7.78", "9.49", "11.1", "13.3"),
    5: ("4.35", "6.63", "9.24", "11.1", "12.8", "15.1"),
}


@pytest.mark.parametrize(
    ("checks", "one_sided", "printed"),
    [(df, level, text) for df, row in PRINTED_CHI2.items() for level, text in zip(LEVELS, row, strict=True)],
)
def test_chi_squared_table_of_the_bioreaction_textbook(checks, one_sided, printed):
    # Half a unit of the last printed figure, except 0.4549 for one check, which the book rounds up to 0.46.
    last = 10.0 ** -len(printed.split(".")[1])
    allowed = last if printed == "0.46" else 0.5 * last + 1e-12
    assert abs(chi2_limit(1 - one_sided, checks) - float(printed)) <= allowed


@pytest.mark.parametrize("checks", [1, 2, 7, 60, 1500])
@pytest.mark.parametrize("level", [0.2, 0.05, 1e-3, 1e-9])
def test_chi_squared_against_scipy_stats(checks, level):
    assert chi2_limit(level, checks) == pytest.approx(chi2.isf(level, checks), rel=1e-11)
    assert chi2_p(chi2_limit(level, checks), checks) == pytest.approx(level, rel=1e-10)


def test_without_checks_there_is_no_limit():
    assert math.isnan(chi2_limit(0.05, 0))
    assert math.isnan(chi2_p(0.0, 0))
    assert math.isnan(expected_statistic_noncentrality(0.05, 0))


# Mah & Tamhane 1982, AIChE J. 28, 828 give the level; 2.49 and 2.63 are printed in Narasimhan & Jordache 2000, Data
# Reconciliation and Gross Error Detection (from memory).
@pytest.mark.parametrize(("count", "printed"), [(1, 1.96), (4, 2.49), (6, 2.63)])
def test_sidak_limits_of_the_textbook(count, printed):
    assert sidak_limit(0.05, count) == pytest.approx(printed, abs=0.005)


@pytest.mark.parametrize("count", [1, 2, 6, 28, 1000])
@pytest.mark.parametrize("level", [0.5, 0.05, 1e-6])
def test_sidak_is_the_law_of_independent_tests(count, level):
    assert 1 - (1 - sidak_level(level, count)) ** count == pytest.approx(level, rel=1e-9)
    assert sidak_limit(level, count) == pytest.approx(norm.isf(sidak_level(level, count) / 2), rel=1e-12)


# lambda_0 = 17.07, delta_0 = 4.13 at 0.001 and 0.80: Baarda 1968, A testing procedure for use in geodetic networks. The
# rest: classical tables of the noncentral chi-squared law (e.g. Haynam, Govindarajulu & Leone 1970). All from memory.
PRINTED_LAMBDA = [
    (0.001, 0.80, 1, 17.07),
    (0.01, 0.80, 1, 11.68),
    (0.05, 0.80, 1, 7.85),
    (0.05, 0.90, 1, 10.51),
    (0.05, 0.90, 2, 12.65),
    (0.05, 0.90, 3, 14.17),
    (0.05, 0.90, 4, 15.41),
    (0.05, 0.90, 5, 16.47),
]


@pytest.mark.parametrize(("level", "power", "df", "printed"), PRINTED_LAMBDA)
def test_noncentrality_of_printed_tables(level, power, df, printed):
    # 17.0746 and 15.4051 round to the printed 17.07 and 15.41
    assert noncentrality(level, power, df) == pytest.approx(printed, abs=0.005)


# Square roots that Madron 1992, Process Plant Performance, uses for the smallest gross error found with 0.9 (from memory).
@pytest.mark.parametrize(("df", "printed"), [(1, 3.24), (2, 3.56), (3, 3.76), (4, 3.92), (5, 4.06)])
def test_smallest_detectable_in_sigmas_as_madron_has_it(df, printed):
    assert smallest_detectable(1.0, 0.05, 0.9, df) == pytest.approx(printed, abs=0.006)


@pytest.mark.parametrize(("level", "delta"), [(0.001, 4.13), (0.01, 3.42), (0.05, 2.80)])
def test_baarda_minimal_detectable_bias(level, delta):
    # delta_0 sigma / sqrt(redundancy number): sigma 0.2, redundancy number 0.25, so a signature of length 2.5
    assert smallest_detectable(2.5, level, 0.8) == pytest.approx(delta * 0.2 / math.sqrt(0.25), abs=0.005 * 0.4)


@pytest.mark.parametrize("df", [1, 4, 30, 400])
@pytest.mark.parametrize(("level", "power"), [(0.05, 0.9), (0.001, 0.8), (0.05, 0.999), (0.05, 0.051)])
def test_noncentrality_gives_the_power_asked_for(level, power, df):
    found = noncentrality(level, power, df)
    assert ncx2.sf(chi2.isf(level, df), df, found) == pytest.approx(power, rel=1e-10)


@pytest.mark.parametrize(("level", "power", "df"), [(0.05, 0.9, 3), (0.001, 0.8, 11), (0.05, 0.99, 60)])
def test_noncentrality_to_ten_digits_by_high_precision(level, power, df):
    with mpmath.workdps(30):

        def missed(nc):
            half = nc / 2
            weights = (mpmath.exp(j * mpmath.log(half) - half - mpmath.loggamma(j + 1)) for j in range(250))
            lower = (mpmath.gammainc(mpmath.mpf(df) / 2 + j, 0, limit / 2, regularized=True) for j in range(250))
            return mpmath.fsum(w * g for w, g in zip(weights, lower, strict=True)) - (1 - mpmath.mpf(power))

        half_df = mpmath.mpf(df) / 2
        limit = mpmath.findroot(
            lambda x: mpmath.gammainc(half_df, x / 2, regularized=True) - mpmath.mpf(level), chi2.isf(level, df)
        )
        exact = mpmath.findroot(missed, mpmath.mpf(noncentrality(level, power, df)) + 0.01)
    assert noncentrality(level, power, df) == pytest.approx(float(exact), rel=1e-10)


def test_for_one_check_it_is_the_two_sided_normal_test():
    delta = smallest_detectable(1.0, 0.05, 0.8)
    limit = norm.isf(0.025)
    assert norm.sf(limit - delta) + norm.cdf(-limit - delta) == pytest.approx(0.8, abs=1e-12)


def test_power_equal_to_the_level_needs_no_fault():
    assert noncentrality(0.05, 0.05, 3) == 0.0


def test_a_fault_that_moves_nothing_is_never_noticed():
    assert smallest_detectable(0.0, 0.05, 0.9) == math.inf
    assert math.isnan(smallest_detectable(math.nan, 0.05, 0.9))


@pytest.mark.parametrize("df", [1, 2, 5, 20])
def test_the_other_definition_is_where_the_expected_statistic_meets_the_limit(df):
    # van der Heijden et al. 1994, Biotechnol. Bioeng. (part III, abstract): sensitivity by the expected statistic
    other = expected_statistic_noncentrality(0.05, df)
    assert ncx2.mean(df, other) == pytest.approx(chi2.isf(0.05, df), rel=1e-12)
    assert other < noncentrality(0.05, 0.8, df)
    assert 0.35 < ncx2.sf(chi2.isf(0.05, df), df, other) < 0.55


def test_the_other_definition_is_never_negative():
    assert expected_statistic_noncentrality(0.9, 5) == 0.0


@pytest.mark.parametrize(
    ("call", "code"),
    [
        (lambda: chi2_limit(0.0, 3), "level-out-of-range"),
        (lambda: chi2_limit(5.0, 3), "level-out-of-range"),
        (lambda: sidak_limit(math.nan, 3), "level-out-of-range"),
        (lambda: sidak_limit(0.05, 0), "no-test"),
        (lambda: noncentrality(0.05, 1.0, 1), "power-out-of-range"),
        (lambda: noncentrality(0.05, 0.01, 1), "power-below-level"),
        (lambda: noncentrality(0.05, 0.9, 0), "no-check"),
    ],
)
def test_questions_without_an_answer_are_refused(call, code):
    with pytest.raises(Refusal) as caught:
        call()
    assert caught.value.code == code


def test_limits_are_plain_floats():
    values = [chi2_limit(0.05, 2), chi2_p(np.float64(3.0), 2), sidak_limit(0.05, 2), noncentrality(0.05, 0.8, 2)]
    assert all(type(v) is float for v in values)
