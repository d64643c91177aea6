"""Weighing and comparison designs of the NIST/SEMATECH e-Handbook: differences read, items unmeasured, one restraint.

The printed solution is exact: integers over a divisor. So is ours, up to rounding in the last bits.
"""

from fractions import Fraction

import numpy as np
import pytest
from published_cases import CASES, COMPUTED, load, matches_print

from reconcile.adjust.dense import prepare

DESIGNS = sorted(p.stem for p in CASES.glob("nist_*.yaml"))


class Design:
    """Rows ``Y_i - design_i items (- P) = 0`` and ``restraint items = R``; items and left-right effect P unmeasured."""

    def __init__(self, name, row_scale=None):
        self.raw = load(name)
        d = np.array(self.raw["comparisons"], dtype=float)
        self.count, self.items = d.shape
        unmeasured = -np.vstack([d, -np.array(self.raw["restraint"], dtype=float)])
        if self.raw["left_right_effect"]:
            unmeasured = np.column_stack([unmeasured, np.append(-np.ones(self.count), 0.0)])
        measured = np.vstack([np.eye(self.count), np.zeros((1, self.count))])
        scale = np.ones(self.count + 1) if row_scale is None else row_scale
        self.scale = scale
        self.adjuster = prepare(scale[:, None] * measured, scale[:, None] * unmeasured, np.ones(self.count))

    def rhs(self, restraint):
        return self.scale * np.append(np.zeros(self.count), restraint)

    def values(self, readings, restraint):
        rhs = self.rhs(restraint)
        x, parity = self.adjuster.adjust(np.atleast_2d(readings), rhs)
        return self.adjuster.unmeasured(x, rhs), parity


@pytest.mark.parametrize("name", DESIGNS)
def test_solution_is_the_printed_rational(name):
    design = Design(name)
    printed, divisor = design.raw["printed"], design.raw["printed"]["divisor"]
    response, _ = design.values(np.eye(design.count), 0.0)
    rows = np.array(printed["solution"])
    if design.raw["left_right_effect"]:
        rows = np.column_stack([rows, printed["left_right_column"]])
    np.testing.assert_allclose(response * divisor, rows, rtol=0, atol=2e-14)
    near = [[Fraction(v).limit_denominator(100) for v in row] for row in response]
    assert near == [[Fraction(int(v), divisor) for v in row] for row in rows]
    of_restraint, _ = design.values(np.zeros(design.count), 1.0)
    np.testing.assert_allclose(of_restraint[0, : design.items] * divisor, printed["restraint_row"], rtol=0, atol=2e-14)
    assert design.adjuster.observable.all()


@pytest.mark.parametrize("name", DESIGNS)
def test_checks_and_factors_of_the_standard_deviation(name):
    design = Design(name)
    assert design.adjuster.checks == design.raw["printed"]["checks"]
    stated = design.raw["printed"]["sigma_factors"]
    cover = design.adjuster.cover_unmeasured[: design.items]
    for combination, factor in zip(stated["combinations"], stated["values"], strict=True):
        assert matches_print(float(np.linalg.norm(np.array(combination) @ cover)), factor, stated["digits"])
    known = np.array(design.raw["restraint"]) @ cover
    assert np.linalg.norm(known) < 1e-14  # the restraint is exactly known


@pytest.mark.parametrize("name", DESIGNS)
def test_example(name):
    design = Design(name)
    example = design.raw["example"]
    values, parity = design.values(example["readings"], example["restraint"])
    np.testing.assert_allclose(values[0], example["values"], rtol=0, atol=COMPUTED)
    assert abs((parity**2).sum() - example["objective"]) <= COMPUTED


@pytest.mark.parametrize("name", DESIGNS)
def test_rows_in_other_units_change_nothing(name):
    rng = np.random.default_rng(20)
    plain = Design(name)
    scaled = Design(name, row_scale=10.0 ** rng.uniform(-5, 5, plain.count + 1))
    y = rng.normal(size=(3, plain.count))
    for one, other in zip(plain.values(y, 2.0), scaled.values(y, 2.0), strict=True):
        assert one.shape == other.shape
    np.testing.assert_allclose(scaled.values(y, 2.0)[0], plain.values(y, 2.0)[0], rtol=0, atol=1e-13)
    assert scaled.adjuster.checks == plain.adjuster.checks
