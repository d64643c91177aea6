"""Stamps: formats, zones, the repeated hour, order. Clock changes are those of the IANA time zone data base."""

import numpy as np
import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from reconcile.errors import InputError, Location, Problems
from reconcile.readings import read_csv
from reconcile.readings.options import ReadOptions
from reconcile.readings.time import check_zone_of, parse_times
from reconcile.readings.time_order import to_centre


def parse(cells, **options):
    problems = Problems("log.csv")
    found = parse_times(cells, ReadOptions(**options), lambda row: Location("log.csv", row + 2, row=row + 1), problems)
    return found, problems.found


def read(tmp_path, stamps, values=None, **options):
    path = tmp_path / "log.csv"
    values = range(1, len(stamps) + 1) if values is None else values
    path.write_text("time,A\n" + "".join(f"{s},{v}\n" for s, v in zip(stamps, values, strict=True)))
    return read_csv(path, **options)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("2025-04-03 14:05", "2025-04-03 14:05:00"),
        ("2025-04-03T14:05:06.25", "2025-04-03 14:05:06.25"),
        ("2025/4/3 14:05", "2025-04-03 14:05:00"),
        ("2025-04-03", "2025-04-03 00:00:00"),
        ("03.04.2025 14:05", "2025-04-03 14:05:00"),
        ("13/04/2025 2:05 PM", "2025-04-13 14:05:00"),
        ("04/13/2025 12:05 am", "2025-04-13 00:05:00"),
        ("2025-04-03 24:00", "2025-04-04 00:00:00"),
    ],
)
def test_formats(text, expected):
    found, problems = parse([text])
    assert not problems
    assert found.index[0] == pd.Timestamp(expected)


@given(st.lists(st.datetimes(min_value=pd.Timestamp("1980-01-01"), max_value=pd.Timestamp("2100-01-01")), min_size=1))
def test_what_is_written_is_read(stamps):
    for form in ("%Y-%m-%d %H:%M:%S.%f", "%Y-%m-%dT%H:%M:%S.%f", "%Y/%m/%d %H:%M:%S.%f", "%d.%m.%Y %H:%M:%S.%f"):
        found, problems = parse([s.strftime(form) for s in stamps])
        assert not problems
        assert list(found.index) == [pd.Timestamp(s) for s in stamps]


def test_day_or_month_first_is_found_declared_or_refused():
    ambiguous = [f"03/{d:02d}/2025" for d in range(1, 13)]
    found, (problem,) = parse(ambiguous)
    assert found.index is None
    assert problem.code == "date-ambiguous"
    assert "'03/01/2025': day first or month first? All 12 dates fit both" in problem.message
    assert "declare day_first" in problem.hint
    assert parse(ambiguous, day_first=True)[0].index[1] == pd.Timestamp("2025-02-03")
    assert parse(ambiguous, day_first=False)[0].index[1] == pd.Timestamp("2025-03-02")
    assert parse([*ambiguous, "03/13/2025"])[0].index[1] == pd.Timestamp("2025-03-02")
    assert parse([*ambiguous, "13/03/2025"])[0].index[1] == pd.Timestamp("2025-02-03")
    (mixed,) = parse(["13/03/2025", "03/14/2025"])[1]
    assert mixed.code == "date-mixed"
    (contradicted,) = parse(["03/13/2025"], day_first=True)[1]
    assert "'03/13/2025' cannot be day first, as declared" in contradicted.message


def test_stamps_that_are_none():
    _, problems = parse(["2025-01-01", "yesterday", "", "2025-02-30", "01/02/25"])
    assert [p.code for p in problems] == ["stamp", "stamp-missing", "stamp"]
    assert problems[0].where.line == 3
    (no_day,) = parse(["2025-02-30 10:00", "2025-3-1"])[1]
    assert "there is no such day or time: '2025-02-30 10:00'" in no_day.message


def test_counting_columns_need_a_unit():
    found, _ = parse(["0", "0.5", "1"], time_unit="h")
    assert (np.diff(found.index) == np.timedelta64(30, "m")).all()
    (problem,) = parse(["0", "10", "20"])[1]
    assert problem.code == "time-unit"
    assert "declare time_unit = s, min, h or d" in problem.hint


# ------------------------------------------------------------------ zones


def test_offsets_become_one_time_line():
    found, _ = parse(["2025-03-30T01:30+01:00", "2025-03-30T03:30+02:00", "2025-03-30T02:30Z"])
    assert (np.diff(found.index) == np.timedelta64(1, "h")).all()
    found, _ = parse(["2025-07-01T12:00Z"], zone="Europe/Berlin")
    assert str(found.index[0]) == "2025-07-01 14:00:00+02:00"


def test_some_rows_without_offset_are_refused():
    _, (problem,) = parse(["2025-03-30T01:30+01:00", "2025-03-30T03:30"])
    assert problem.code == "zone-mixed"
    assert "row 1 has a zone (+01:00), row 2 has none" in problem.message


def test_zone_in_one_of_two_sources():
    problems = Problems()
    bare = pd.DatetimeIndex(["2025-05-01 10:00"])
    zoned = bare.tz_localize("Etc/GMT-2")
    check_zone_of(bare, "log.csv", zoned, "lab.csv", problems)
    (problem,) = problems.found
    assert problem.code == "zone-missing"
    assert problem.message == "log.csv has stamps without a zone, lab.csv has +02:00"
    assert problem.hint == "declare zone = ... for log.csv"


def test_unknown_zone_and_skipped_hour():
    (problem,) = parse(["2025-05-01 10:00"], zone="Europe/Berlyn")[1]
    assert problem.code == "zone-unknown"
    (problem,) = parse(["2025-03-30 01:30", "2025-03-30 02:30"], zone="Europe/Berlin")[1]
    assert problem.code == "hour-skipped"
    assert problem.where.line == 3


AUTUMN = [f"2024-10-27 {h:02d}:{m:02d}" for h in (0, 1, 2, 2, 3) for m in (0, 15, 30, 45)]


def test_the_repeated_hour_is_kept_once_each_and_counted(tmp_path):
    """Quarter-hour file over the end of summer time: 27 October 2024, 03:00 CEST to 02:00 CET."""
    values = np.random.default_rng(11).uniform(1, 5, len(AUTUMN)).round(6)
    table = read(tmp_path, AUTUMN, values.tolist(), zone="Europe/Berlin")
    assert len(table) == 20
    assert (np.diff(table.time) == np.timedelta64(15, "m")).all()
    assert abs(table.values.sum() - values.sum()) <= 1e-12 * values.sum()
    (notice,) = table.notices
    assert notice.code == "repeated-hour"
    assert "the hour that the clocks repeat on 2024-10-27 has 8 rows: both halves are there" in notice.message


def test_the_repeated_hour_without_a_zone_is_refused(tmp_path):
    with pytest.raises(InputError) as caught:
        read(tmp_path, AUTUMN)
    assert caught.value.code == "repeated-hour"
    text = str(caught.value)
    assert "02:00 to 02:45 comes twice on 2024-10-27: local time with a change of the clocks?" in text
    assert "declare zone = Europe/..." in text
    assert caught.value.problems[0].where.line == 14


def test_half_of_the_repeated_hour(tmp_path):
    one_half = list(dict.fromkeys(AUTUMN))
    with pytest.raises(InputError, match="comes twice in Europe/Berlin") as caught:
        read(tmp_path, one_half, zone="Europe/Berlin")
    assert "declare repeated_hour = first or second" in str(caught.value)
    first = read(tmp_path, one_half, zone="Europe/Berlin", repeated_hour="first").time
    second = read(tmp_path, one_half, zone="Europe/Berlin", repeated_hour="second").time
    assert first[8].utcoffset() == pd.Timedelta("2h")
    assert second[8].utcoffset() == pd.Timedelta("1h")


# ------------------------------------------------------------------ order


def test_rows_out_of_order(tmp_path):
    stamps = ["2025-01-01 14:00", "2025-01-01 14:07", "2025-01-01 14:02", "2025-01-01 14:10"]
    with pytest.raises(InputError) as caught:
        read(tmp_path, stamps)
    assert caught.value.code == "time-order"
    text = str(caught.value)
    assert "row 3 is earlier than row 2 (2025-01-01 14:02:00 after 2025-01-01 14:07:00)" in text
    assert "two files appended?" in text
    table = read(tmp_path, stamps, sort=True)
    assert table.values[:, 0].tolist() == [1, 3, 2, 4]
    assert table.lines.tolist() == [2, 4, 3, 5]
    assert "rows-sorted" in [n.code for n in table.notices]
    with pytest.raises(InputError, match="the newest row comes first; declare sort = true"):
        read(tmp_path, sorted(stamps, reverse=True))


def test_duplicate_stamps(tmp_path):
    stamps = ["2025-01-01 14:00", "2025-01-01 14:05", "2025-01-01 14:05", "2025-01-01 14:10"]
    with pytest.raises(InputError) as caught:
        read(tmp_path, stamps)
    assert caught.value.code == "duplicate-stamp"
    assert "rows 2 and 3 have the same stamp" in str(caught.value)
    assert read(tmp_path, stamps, duplicates="first").values[:, 0].tolist() == [1, 2, 4]
    assert read(tmp_path, stamps, duplicates="last").values[:, 0].tolist() == [1, 3, 4]


def test_irregular_steps_are_told(tmp_path):
    stamps = [f"2025-01-01 00:{m:02d}" for m in (0, 1, 2, 3, 4, 9, 10)]
    (notice,) = read(tmp_path, stamps).notices
    assert notice.code == "irregular-step"
    assert "1 of 6 steps are not the usual 60 s; the longest is 300 s, after 2025-01-01 00:04:00" in notice.message


def test_interval_convention():
    index = pd.date_range("2025-01-01", periods=4, freq="15min")
    problems = Problems()
    assert to_centre(index, None, "log.csv", problems) is None
    assert problems.found[0].code == "interval-unknown"
    assert "start or at the end of their interval" in problems.found[0].message
    assert to_centre(index, "start", "log.csv", problems)[0] == pd.Timestamp("2025-01-01 00:07:30")
    assert to_centre(index, "end", "log.csv", problems)[0] == pd.Timestamp("2024-12-31 23:52:30")
    assert to_centre(index, "centre", "log.csv", problems).equals(index)
    assert to_centre(index, None, "log.csv", problems, needed=False).equals(index)
