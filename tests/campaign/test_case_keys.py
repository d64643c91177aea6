"""What a case may say of its log: every mistake at its place, every key documented. All cases are made up."""

from __future__ import annotations

import json

import pytest

import reconcile
from reconcile.campaign.options import (
    CounterModel,
    FindLagModel,
    LabModel,
    LevelModel,
    LimitsModel,
    LineUpModel,
    ReadingModel,
    SpanModel,
    WindowsModel,
)
from reconcile.campaign.source import plan_of

HEAD = """\
reconcile: 1
domains: {fluid: {unit: kg/h}}
nodes: {tank: {stores: true}}
streams: {feed: outside -> tank, out: tank -> outside}
meters:
  F: {reads: feed.flow, unit: kg/h, sigma: 0.5 kg/h, span: 0 to 60 kg/h%s}
  O: {reads: out.flow, unit: kg/h, sigma: 0.5 kg/h}
"""


def case_of(folder, reading="", more=""):
    (folder / "case.yaml").write_text(HEAD % (f", reading: {reading}" if reading else "") + more)
    return reconcile.load_case(folder)


@pytest.mark.parametrize(
    ("reading", "told"),
    [
        ("{@countr: {}}", "unknown key 'countr' in reading of meter 'F'; did you mean 'counter'?"),
        ("{counter: {@rolls_over: 9}}", "unknown key 'rolls_over'"),
        ("{counter: {pulse: 1 kg, rolls_over_at: @-5}}", "rolls_over_at of meter 'F'"),
        ("{@counter: {}}", "pulse of the counter of 'F' is missing, and meter 'F' is in kg/h"),
        ("{counter: {pulse: @3 m}}", "pulse of the counter of 'F' is in m (length), which gives no kg/h"),
        ("{counter: {pulse: 2 kg, largest_rate: @3 kg}}", "largest_rate of the counter of 'F' is in kg (mass)"),
        ("{counter: {pulse: 2 kg}, noise: @1 kg/h}", "F' is a counter; noise has no meaning"),
        ("{@level: {unit: '%'}}", "the level of 'F' has neither holds nor table"),
        ("{@level: {unit: m, holds: 4 kg, table: [[0, 1], [1, 2]]}}", "has both holds and table"),
        (
            "{level: {unit: m, table: @[[0, 1], [0.5, 0.8]], content_unit: kg}}",
            "the contents of the table do not rise: 1 is followed by 0.8",
        ),
        ("{level: {unit: m, holds: 4 kg, each_reading: @2 s}}", "each_reading of the level of 'F' is in s (time)"),
        ("{sample: @true, counter: {pulse: 1 kg}}", "meter 'F' is both counter and sample"),
        ("{lag: @8 kg}", "lag of meter 'F' is '8 kg', which is no time"),
        ("{lag: 8 min, find_lag: @{between: 0 to 20 min, behind: O}}", "has a lag and finds one"),
        ("{find_lag: {between: 0 to 20 min, behind: @OO}}", "names 'OO', which is no meter; did you mean 'O'?"),
        ("{find_lag: {between: @20 min, behind: O}}", "range of the lag of meter 'F' '20 min' is no range"),
        ("{limits: {possible: @0 to 60 kg}}", "possible range of meter 'F' is in kg (mass), but kg/h"),
        ("{limits: {spike: @-2 kg/h}}", "spike of meter 'F' is -2"),
        ("{limits: {flat_for: @1}}", "flat_for of meter 'F'"),
        ("{limits: {gap: @3}}", "gap of meter 'F' is 3, which is no time"),
        ("{censored: @drop}", "censored of meter 'F'"),
        ("{noise: @0 kg/h}", "noise of meter 'F' is 0"),
        ("{noise: @2}", "noise of meter 'F' is in no unit"),
        ("{@sample: true}", "no lab: gives F; add lab: with the name of the file"),
    ],
)
def test_mistakes_of_a_reading_block(tmp_path, reading, told):
    """The place that the message names is marked."""
    with pytest.raises(reconcile.InputError) as caught:
        case_of(tmp_path, reading.replace("@", ""))
    assert told in str(caught.value)
    line = (HEAD % f", reading: {reading}").splitlines()[5]
    found = [p for p in caught.value.problems if told in str(p)]
    assert (found[0].where.line, found[0].where.column) == (6, line.index("@") + 1)


@pytest.mark.parametrize(
    ("block", "told"),
    [
        ("{}", "windows are cut in one way; none given; give one of length, rows, by, at, whole"),
        ("{length: 20 min, rows: 8}", "length and rows given"),
        ("{length: 20}", "length of windows is 20, which is no time"),
        ("{length: 20 min, requird: [F]}", "unknown key 'requird' in windows; did you mean 'required'?"),
        ("{length: 20 min, required: [FF]}", "required of windows names 'FF', which is no meter; did you mean 'F'?"),
        ("{length: 20 min, steady: slop}", "steady of windows"),
        ("{length: 20 min, steady: ratio, steady_level: 0.02}", "no limit for level 0.02; write one of 0.1, 0.05"),
        ("{length: 20 min, runs_when: 'F > 2 kg'}", "runs_when of windows"),
        ("{length: 20 min, runs_when: 'F >'}", "is not understood"),
        ("{length: 20 min, least_coverage: 50}", "least_coverage of windows"),
        ("{at: [{start: 2025-01-01}]}", "has no 'end'"),
    ],
)
def test_mistakes_of_windows(tmp_path, block, told):
    with pytest.raises(reconcile.InputError) as caught:
        case_of(tmp_path, more=f"windows: {block}\n")
    assert told in str(caught.value)
    assert "case.yaml:8" in str(caught.value)


def test_all_mistakes_are_told_at_once(tmp_path):
    with pytest.raises(reconcile.InputError) as caught:
        case_of(tmp_path, "{lag: 8 kg, noise: 2}", "windows: {length: 20, required: [FF]}\nlab: {before: 3}\n")
    codes = {p.code for p in caught.value.problems}
    assert codes >= {"not-a-duration", "unit-mismatch", "unknown-meter", "missing-key"}
    assert len(caught.value.problems) >= 5


def test_quantities_are_read_into_the_units_of_the_meter(tmp_path):
    case = case_of(
        tmp_path,
        "{counter: {pulse: 500 g, rolls_over_at: 1000, largest_rate: 1 kg/min, each_reading: 0.2 kg}}",
        "windows: {length: 2 h, hold_up: 45 min, runs_when: 'O > 0.01 kg/s'}\n",
    )
    plan = plan_of(case.parts.spec)
    rule = plan.of("F")
    # Increments in kg/h times an hour: half a kilogram a count; 60 kg/h pass in 3600 s at most.
    assert rule.counter.pulse == pytest.approx(0.5)
    assert rule.counter.max_rate == pytest.approx(60 / 3600)
    assert rule.counter.sigma == pytest.approx(0.2)
    assert (rule.amount_unit, rule.amount_factor, rule.per) == ("g", pytest.approx(1e-3), 3600.0)
    assert (plan.windows.length, plan.windows.hold_up) == (7200.0, 2700.0)
    assert plan.windows.runs_when.column == "O"
    assert float(plan.windows.runs_when.value) == pytest.approx(36.0)


def test_a_column_may_have_another_header(tmp_path):
    case = case_of(tmp_path, "{column: plant/feed rate}")
    (tmp_path / "log.csv").write_text("plant/feed rate,O\n50.1,49.9\n")
    result = case.run(tmp_path / "log.csv")
    assert result.readings[0].tolist() == [50.1, 49.9]
    (tmp_path / "log.csv").write_text("plant/fed rate,O\n50.1,49.9\n")
    with pytest.raises(reconcile.InputError, match="plant/feed rate"):
        case.run(tmp_path / "log.csv")


@pytest.mark.parametrize(
    "model",
    [CounterModel, FindLagModel, LabModel, LevelModel, LimitsModel, LineUpModel, ReadingModel, SpanModel, WindowsModel],
)
def test_every_key_is_described_in_the_schema(model):
    for name, field in model.model_fields.items():
        assert field.description, f"{model.__name__}.{name}"
    schema = json.dumps(reconcile.case.json_schema())
    for field in model.model_fields.values():
        assert json.dumps(field.description)[1:-1] in schema


def test_the_schema_takes_what_the_reader_takes(tmp_path, datasets):
    jsonschema = pytest.importorskip("jsonschema")
    yaml = pytest.importorskip("yaml")
    validator = jsonschema.Draft202012Validator(reconcile.case.json_schema())
    for name in ("batch_tank", "membrane_log", "flotation_test"):
        data = yaml.safe_load((datasets / name / "case.yaml").read_text())
        assert list(validator.iter_errors(data)) == []
    data["windows"] = {"lenght": "20 min"}
    assert list(validator.iter_errors(data))
