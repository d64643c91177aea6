"""Charge at a bus (invented figures): three shunts scaled against one reference.

Expected values: one condition with a full covariance, worked by hand from S = diag(0.05^2) + a a', a = 1 % of each
string reading.
"""

from __future__ import annotations

import numpy as np
import pytest

import reconcile

CASE = """
reconcile: 1
title: Battery bench (invented)
domains:
  fluid: {unit: A h, leaks: none}
streams:
  supply: outside -> bus
  string_1: bus -> outside
  string_2: bus -> outside
  string_3: bus -> outside
meters:
  Q0: {reads: supply.flow,   unit: A h, sigma: 0.05 A h}
  Q1: {reads: string_1.flow, unit: A h, sigma: 0.05 A h}
  Q2: {reads: string_2.flow, unit: A h, sigma: 0.05 A h}
  Q3: {reads: string_3.flow, unit: A h, sigma: 0.05 A h}
settings: {percent_at: reading}
"""
SHARED = """
shared_errors:
  reference: {sigma: 1 % of reading, meters: [Q1, Q2, Q3]}
"""
READ = {"Q0": 24.00, "Q1": 7.90, "Q2": 8.10, "Q3": 7.70}


def test_without_the_shared_error_it_is_a_false_alarm(write_case):
    result = reconcile.load_case(write_case(CASE)).run(READ)
    assert result.objective[0] == pytest.approx(9.00, abs=1e-9)
    balance = result.snapshot(0).balances[0]
    assert (balance.before, balance.spread) == pytest.approx((0.30, 0.10), abs=1e-9)
    assert result.suspicious[0]


def test_with_the_shared_error_the_readings_agree(write_case):
    result = reconcile.load_case(write_case(CASE + SHARED)).run(READ)
    assert result.objective[0] == pytest.approx(1.3602, abs=5e-5)
    assert result.p_value[0] == pytest.approx(0.2435, abs=5e-5)
    assert result.snapshot(0).balances[0].spread == pytest.approx(0.2572, abs=5e-5)
    assert not result.suspicious[0]


def test_off_diagonal_terms_are_used(write_case):
    model = reconcile.load_case(write_case(CASE + SHARED)).model
    base = model.to_base(np.array([[READ[f"Q{i}"] for i in range(4)]]))[0]
    covariance = model.covariance_of_readings(base)
    rho = covariance[1, 2] / np.sqrt(covariance[1, 1] * covariance[2, 2])
    assert rho == pytest.approx(0.719, abs=5e-4)
    independent = CASE
    for i in (1, 2, 3):
        independent = independent.replace(
            f"string_{i}.flow, unit: A h, sigma: 0.05 A h",
            f"string_{i}.flow, unit: A h, sigma: [0.05 A h, 1 % of reading]",
        )
    wrong = reconcile.load_case(write_case(independent)).run(READ)
    assert wrong.objective[0] == pytest.approx(3.13, abs=5e-3)


def test_adjusted_values_follow_the_common_cause(write_case):
    result = reconcile.load_case(write_case(CASE + SHARED)).run(READ)
    assert result.adjusted[0] == pytest.approx([23.9887, 7.9962, 8.1984, 7.7941], abs=5e-5)
    assert result.sigmas[0] == pytest.approx([0.0490, 0.0440, 0.0441, 0.0438], abs=5e-5)
    share = [r.share for r in result.snapshot(0).readings]
    assert share == pytest.approx([0.0378, 0.3207, 0.3279, 0.3136], abs=5e-5)


def test_a_real_disagreement_still_shows_and_lists_the_common_cause(write_case):
    result = reconcile.load_case(write_case(CASE + SHARED)).run({**READ, "Q0": 24.80})
    assert result.objective[0] == pytest.approx(18.3, abs=0.05)
    assert result.suspicious[0]
    named = {f.candidate.name for a in result.snapshot(0).accounts.standing for x in a.alternatives for f in x.faults}
    assert {"Q0", "shared:reference"} <= named
