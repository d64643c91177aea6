"""Dates on which a meter was calibrated: read from a case, refused where they stand."""

from __future__ import annotations

from datetime import UTC, datetime

METER = "meters:\n  FT-1: {{reads: supply.flow, unit: L/min, sigma: 1 L/min, calibrated: {}}}\n"


def test_dates_and_times_are_read(read):
    spec = read(METER.format("[2024-03-01, 2024-05-14T09:30]"))
    assert spec.meters["FT-1"].options["calibrated"] == (datetime(2024, 3, 1), datetime(2024, 5, 14, 9, 30))


def test_one_text_may_hold_several_dates(read):
    spec = read(METER.format("'2024-03-01T00:00+00:00, 2024-05-14T00:00+00:00'"))
    assert spec.meters["FT-1"].options["calibrated"] == (
        datetime(2024, 3, 1, tzinfo=UTC),
        datetime(2024, 5, 14, tzinfo=UTC),
    )


def test_a_meter_without_dates_has_none(read):
    spec = read("meters:\n  FT-1: {reads: supply.flow, unit: L/min, sigma: 1 L/min}\n")
    assert "calibrated" not in spec.meters["FT-1"].options


def test_every_wrong_date_is_told_at_its_place(refuse):
    lines = refuse(METER.format("[2024-03-01, 1/4/2024, 2024-02-01, 20240501]"))
    assert len(lines) == 3
    assert all("8:" in line or "case.yaml" in line for line in lines)
    assert "'1/4/2024' is no date" in lines[0]
    assert "does not come after the one before" in lines[1]
    assert "'20240501' is no date" in lines[2]
    columns = [int(line.split(":")[2]) for line in lines]
    assert columns == sorted(columns)
    assert len(set(columns)) == 3


def test_mixed_zones_and_no_list_are_refused(refuse):
    assert "unlike the one before" in refuse(METER.format("[2024-03-01, '2024-04-01T00:00+01:00']"))[0]
    assert "no list of dates" in refuse(METER.format("{a: 1}"))[0]
