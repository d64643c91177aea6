"""Leak or bad meter, asked at several flows (an invented building: its inlet meter and the sum of its sub-meters).

Expected values were computed independently by regression through the origin; the spread of the difference is 0.25 m3/h.
"""

from __future__ import annotations

import json

import numpy as np
import pytest
from click.testing import CliRunner

import reconcile
from reconcile.cli import main

CASE = """\
reconcile: 1
title: Inlet of a building and its sub-meters (invented)
domains:
  fluid: {unit: m3/h}
streams:
  inlet: outside -> building
  used: building -> outside
meters:
  INLET: {reads: inlet.flow, unit: m3/h, sigma: 0.20 m3/h}
  SUBS: {reads: used.flow, unit: m3/h, sigma: 0.15 m3/h}
readings: readings.csv
"""
SUBS = [4.0, 8.1, 15.9, 24.2, 30.1, 12.0]
LEAKING = [6.1, 9.9, 18.1, 26.2, 32.0, 14.1]
SCALED = [4.4, 8.6, 17.3, 26.0, 32.6, 13.1]


@pytest.fixture
def case(write_case):
    return reconcile.load_case(write_case(CASE))


def history(case, inlet, subs=SUBS):
    return case.run({"INLET": inlet, "SUBS": subs}).history


def sentence(text):
    return " ".join(text.split())


def names(history, shape):
    return {n for c in history.levels.classes for m in c if m.shape == shape for n in m.names}


def test_a_constant_difference(case):
    h = history(case, LEAKING)
    f = h.levels
    constant, scale = f.model("constant", "INLET"), f.model("scale", "INLET")
    assert (constant.size, constant.sigma) == pytest.approx((2.02, 0.10), abs=5e-3)
    assert (constant.left, constant.limit, constant.checks) == (pytest.approx(1.73, abs=5e-3), pytest.approx(11.07, abs=5e-3), 5)  # fmt: skip
    assert (scale.size, scale.left) == (pytest.approx(0.096, abs=5e-4), pytest.approx(102.8, abs=0.05))
    assert not scale.survives
    assert f.left == pytest.approx(392, abs=0.5)
    assert f.outcome == "constant"
    # An offset of either meter and a loss look exactly alike: one class.
    (tied,) = f.classes
    assert {m.names[0] for m in tied} == {"INLET", "SUBS", "building.leak"}
    assert abs(f.slope.size) < 1.96 * f.slope.sigma


def test_both_terms_for_the_inlet(case):
    """The slope for the inlet, on what the sub-meters say flows: -0.003 with a spread of 0.011, not needed."""
    from reconcile.diagnose.operating import both_terms
    from reconcile.over_time.levels import _columns
    from reconcile.over_time.sequence import Sequence

    c = _columns(Sequence.of(case.run({"INLET": LEAKING, "SUBS": SUBS})))
    _, slope = both_terms(c.stack, (c.constant.index(0), c.scale_of(0)))
    assert (slope.size, slope.sigma) == pytest.approx((-0.003, 0.011), abs=5e-4)


def test_the_words_for_a_constant_difference(case):
    text = sentence(history(case, LEAKING).summary())
    assert "The error is constant, at every level from 6.10 to 32.00 m3/h (χ² 1.73, limit 11.07)" in text
    assert "INLET reads high by 2.02 m3/h (± 0.10; a zero offset)" in text
    assert "2.02 m3/h lost at building (± 0.10; a leak, or a steady user that no meter reads)" in text
    assert "Not an error of scale: -8.99 % of SUBS leaves χ² 85.4, +9.58 % of INLET leaves χ² 102.8" in text
    assert "comes on top: not needed" in text
    assert "A zero test of INLET and SUBS with the valve closed separates the two" in text
    assert "begins or grows: " not in text


def test_a_share(case):
    h = history(case, SCALED)
    f = h.levels
    scale, constant = f.model("scale", "INLET"), f.model("constant", "INLET")
    assert (scale.size, scale.sigma) == pytest.approx((0.081, 0.006), abs=5e-4)
    assert scale.left == pytest.approx(1.42, abs=5e-3)
    assert constant.left == pytest.approx(51.0, abs=0.05)
    assert f.outcome == "scale"
    assert names(h, "scale") == {"INLET", "SUBS"}
    assert not names(h, "constant")
    assert not h.drifts
    text = sentence(h.summary())
    assert "INLET reads high by 8.12 ± 0.56 % of its value (scale)" in text
    assert "Not a leak or a zero offset: a constant of 1.28 m3/h leaves χ² 51.0, limit 11.07" in text


def test_all_sub_meters_low_by_the_same_share_is_the_rival(write_case):
    """Three sub-meters that each carry a changing part: no single one explains it, all of them together do."""
    text = CASE.replace("  used: building -> outside\n", "".join(f"  use_{k}: building -> outside\n" for k in "abc"))
    text = text.replace(
        "  SUBS: {reads: used.flow, unit: m3/h, sigma: 0.15 m3/h}\n",
        "".join(f"  S-{k}: {{reads: use_{k}.flow, unit: m3/h, sigma: 0.1 m3/h}}\n" for k in "abc"),
    )
    rng = np.random.default_rng(1)
    parts = rng.uniform(1, 12, size=(12, 3)) * rng.uniform(0.2, 2.0, size=(12, 1))
    readings = {f"S-{k}": parts[:, i] + 0.1 * rng.normal(size=12) for i, k in enumerate("abc")}
    readings["INLET"] = 1.08 * parts.sum(axis=1) + 0.2 * rng.normal(size=12)
    h = reconcile.load_case(write_case(text)).run(readings).history
    assert h.levels.outcome == "scale"
    assert names(h, "scale") == {"INLET"}
    assert names(h, "common scale") == {"S-a", "S-b", "S-c"}
    assert "all of S-a, S-b, S-c low by the same share" in sentence(h.summary())


def test_one_flow_level_cannot_tell_and_says_which_would(case):
    h = history(case, LEAKING[2:3], SUBS[2:3])
    f = h.levels
    assert f.outcome == "either"
    assert f.one_level
    assert f.model("constant", "INLET").left == pytest.approx(0, abs=1e-9)
    assert f.model("scale", "INLET").left == pytest.approx(0, abs=1e-9)
    assert f.next.tag == "INLET"
    assert f.next.below < 15.9 < f.next.above
    text = sentence(h.summary())
    assert "Cannot tell from one flow level" in text
    assert f"INLET at {f.next.below:.2f} m3/h or lower, or at {f.next.above:.2f} m3/h or higher would tell" in text


@pytest.mark.parametrize("side", ["below", "above"])
def test_a_second_snapshot_at_that_level_does_tell(case, side):
    """With the noise left out, a constant error at the planned level leaves the share beyond its limit."""
    plan = history(case, LEAKING[2:3], SUBS[2:3]).levels.next
    level = getattr(plan, side)
    assert history(case, [18.1, level + 2.2], [15.9, level]).levels.outcome == "constant"
    assert history(case, [18.1, 16.0 + 2.2], [15.9, 16.0]).levels.outcome == "either"


def test_nothing_wrong_says_nothing_of_flow_levels(case):
    h = history(case, [4.1, 8.0, 16.0, 24.1, 30.2, 11.9])
    assert h.levels.outcome == "nothing"
    assert "Flow levels" not in h.summary()


def test_the_autumn_hour_is_kept_twice_and_counted(write_case):
    """A quarter-hour file over the end of summer time, 27 October 2024 in Berlin: both hours stay, the total as well."""
    stamps = [f"2024-10-27 {h:02d}:{m:02d}" for h in (0, 1, 2, 2, 3, 4) for m in (0, 15, 30, 45)]
    subs = np.random.default_rng(5).uniform(4, 30, len(stamps)).round(3)
    rows = "".join(f"{t},{s + 2:.3f},{s:.3f}\n" for t, s in zip(stamps, subs, strict=True))
    text = CASE.replace("readings: readings.csv", "readings: {file: readings.csv, zone: Europe/Berlin}")
    result = reconcile.load_case(write_case(text, "time,INLET,SUBS\n" + rows)).run()
    assert result.size == 24
    assert len(set(result.labels)) == 24
    assert any(n.code == "repeated-hour" for n in result.notices)
    total = result.readings[:, result.tags.index("SUBS")].sum()
    assert abs(total - subs.sum()) <= 1e-12 * subs.sum()
    h = result.history
    assert h.levels.outcome == "constant"
    assert h.levels.model("constant", "INLET").size == pytest.approx(2.0, abs=1e-9)


def test_the_command_prints_text_and_json(write_case):
    rows = "".join(f"{i},{s}\n" for i, s in zip(LEAKING, SUBS, strict=True))
    path = write_case(CASE, "INLET,SUBS\n" + rows)
    text = CliRunner().invoke(main, ["history", str(path)])
    assert text.exit_code == 0
    assert "OVER ALL 6 SNAPSHOTS" in text.output
    assert max(len(line) for line in text.output.splitlines()) <= 100
    data = json.loads(CliRunner().invoke(main, ["history", str(path), "--json"]).output)
    assert data["levels"]["outcome"] == "constant"
    assert data["steady"]["accounts"]["conclusion"] == "cannot tell"
    assert data["sigmas"]["status"] == "few"
