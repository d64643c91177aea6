"""Stamps: what they say, and in which zone."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ..errors import Location, Notice, Problems
from .cells import BLANKS, clean
from .options import ReadOptions

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["TimeColumn", "check_zone_of", "localise", "parse_times"]

_CLOCK = r"(?:[T ]\s*(?P<h>\d{1,2}):(?P<min>\d{2})(?::(?P<s>\d{2})(?:[.,](?P<f>\d{1,9}))?)?\s*(?P<ampm>[AaPp][Mm])?)?"
_OFFSET = r"\s*(?P<offset>Z|z|UTC|[+-]\d{2}(?::?\d{2})?)?"
_YEAR_FIRST = re.compile(rf"(?P<y>\d{{4}})[-/.](?P<mo>\d{{1,2}})[-/.](?P<d>\d{{1,2}}){_CLOCK}{_OFFSET}")
_YEAR_LAST = re.compile(rf"(?P<a>\d{{1,2}})(?P<mark>[-/.])(?P<b>\d{{1,2}})[-/.](?P<y>\d{{2,4}}){_CLOCK}{_OFFSET}")
_ISO = re.compile(r"\d{4}-\d{2}-\d{2}(?:[T ]\d{2}:\d{2}(?::\d{2}(?:\.\d{1,9})?)?)?(Z|[+-]\d{2}:\d{2})?")
_NUMBER = re.compile(r"[+-]?\d+([.,]\d+)?([eE][+-]?\d+)?")
_SECONDS = {"s": 1.0, "min": 60.0, "h": 3600.0, "d": 86400.0}


@dataclass(frozen=True)
class TimeColumn:
    """Stamps as they were understood.

    Attributes
    ----------
    index : pandas.DatetimeIndex, optional
        None when something is wrong with them.
    words : str
        How they were read, for the echo.
    notices : tuple of Notice
    """

    index: pd.DatetimeIndex | None
    words: str = ""
    notices: tuple[Notice, ...] = field(default=())


def parse_times(
    cells: Sequence[str], options: ReadOptions, where: Callable[[int], Location], problems: Problems
) -> TimeColumn:
    """Read a column of stamps.

    Parameters
    ----------
    cells : sequence of str, length N
    options : ReadOptions
        Uses `zone`, `day_first`, `repeated_hour` and `time_unit`.
    where : callable
        Place of a row, counted from 0.
    problems : Problems
        Receives dates that fit two readings, mixed zones, stamps that are none.
    """
    import pandas as pd

    if not len(cells):
        return TimeColumn(pd.DatetimeIndex([]))
    quick = _parse_iso(cells)
    if quick is not None:
        index, zoned = quick
        words = "ISO 8601"
    else:
        texts = [clean(c) for c in cells]
        if all(_NUMBER.fullmatch(t) for t in texts):
            return _counted(texts, options, where, problems)
        parsed = _parse_slow(texts, options, where, problems)
        if parsed is None:
            return TimeColumn(None)
        index, zoned, words = parsed
    if zoned:
        index = index.tz_localize("UTC")
        zone = options.zone
        index = index.tz_convert(zone) if zone else index
        return TimeColumn(index, f"{words}, offsets in the file, shown in {zone or 'UTC'}")
    if options.zone is None:
        return TimeColumn(index, f"{words}, no zone in the file and none declared")
    local, notices = localise(index, options.zone, options.repeated_hour, where, problems)
    return TimeColumn(local, f"{words}, zone {options.zone} as declared", notices)


def _parse_iso(cells: Sequence[str]) -> tuple[pd.DatetimeIndex, bool] | None:
    import pandas as pd

    first = cells[0]
    found = _ISO.fullmatch(first)
    length = len(first)
    if found is None or any(len(c) != length for c in cells):
        return None
    offset = found.group(1)
    if any((c[-1] == "Z" or (c[-6:-5] in ("+", "-") and ":" in c[-6:])) != (offset is not None) for c in cells):
        return None
    try:
        index = pd.to_datetime(pd.Series(list(cells)), format="ISO8601", utc=True)
    except ValueError:
        return None
    return pd.DatetimeIndex(index).tz_localize(None), offset is not None


def _counted(
    texts: Sequence[str], options: ReadOptions, where: Callable[[int], Location], problems: Problems
) -> TimeColumn:
    import pandas as pd

    if options.time_unit not in _SECONDS:
        problems.add(
            "time-unit",
            f"the time column counts ({texts[0]!r}, ...): in what?",
            "declare time_unit = s, min, h or d; for plain numbers of rows declare label_column instead",
            where(0),
        )
        return TimeColumn(None)
    seconds = np.array([float(t.replace(",", ".")) for t in texts]) * _SECONDS[options.time_unit]
    index = pd.DatetimeIndex(pd.Timestamp(0) + pd.to_timedelta(seconds, unit="s"))
    return TimeColumn(index, f"{options.time_unit} counted from 1970-01-01 00:00")


def _parse_slow(
    texts: Sequence[str], options: ReadOptions, where: Callable[[int], Location], problems: Problems
) -> tuple[pd.DatetimeIndex, bool, str] | None:
    """Read stamps one by one; return naive stamps (UTC if `zoned`)."""
    import pandas as pd

    matches: list[re.Match[str] | None] = []
    for row, text in enumerate(texts):
        found = _YEAR_FIRST.fullmatch(text) or _YEAR_LAST.fullmatch(text)
        if found is None:
            blank = text.casefold() in BLANKS
            problems.add(
                "stamp-missing" if blank else "stamp",
                "the row has no stamp" if blank else f"{text!r} is not a date and time",
                "write e.g. 2025-04-03 14:05, with the day of the year in figures",
                where(row),
            )
        elif found.re is _YEAR_LAST and len(found.group("y")) != 4:
            problems.add("stamp", f"{text!r}: which of these is the year?", "write it with four figures", where(row))
            found = None
        matches.append(found)
    good = [m for m in matches if m is not None]
    if len(good) < len(texts):
        return None
    day_first = _day_first(good, matches, options, where, problems)
    zoned = _all_zoned(matches, where, problems)
    if day_first is None or zoned is None:
        return None
    stamps = []
    complete = True
    for row, found in enumerate(good):
        try:
            stamps.append(_stamp(found, day_first=day_first))
        except ValueError:
            complete = False
            problems.add("stamp", f"there is no such day or time: {texts[row]!r}", "correct the stamp", where(row))
    if not complete:
        return None
    words = ("day first" if day_first else "month first") if any(m.re is _YEAR_LAST for m in good) else "year first"
    return pd.DatetimeIndex(np.array(stamps, dtype="datetime64[us]")), zoned, words


def _day_first(
    good: Sequence[re.Match[str]],
    matches: Sequence[re.Match[str] | None],
    options: ReadOptions,
    where: Callable[[int], Location],
    problems: Problems,
) -> bool | None:
    last = [m for m in good if m.re is _YEAR_LAST]
    if not last:
        return True
    day = next((i for i, m in enumerate(matches) if m and m.re is _YEAR_LAST and int(m.group("a")) > 12), None)
    month = next((i for i, m in enumerate(matches) if m and m.re is _YEAR_LAST and int(m.group("b")) > 12), None)
    if day is not None and month is not None:
        problems.add(
            "date-mixed",
            f"{matches[month].group(0)!r} is month first, {matches[day].group(0)!r} "  # type: ignore[union-attr]
            f"(row {day + 1}) is day first",
            "write all dates as year-month-day",
            where(month),
        )
        return None
    found = True if day is not None else False if month is not None else None
    if options.day_first is not None:
        if found is not None and found != options.day_first:
            row = day if day is not None else month
            text = matches[row].group(0)  # type: ignore[index, union-attr]
            declared = "day first" if options.day_first else "month first"
            problems.add(
                "date-ambiguous", f"{text!r} cannot be {declared}, as declared", "correct day_first", where(row or 0)
            )
            return None
        return options.day_first
    if found is not None:
        return found
    if all(m.group("mark") == "." for m in last):
        return True  # dates with points are written day first (common practice, no source)
    row = next(i for i, m in enumerate(matches) if m and m.re is _YEAR_LAST)
    problems.add(
        "date-ambiguous",
        f"{last[0].group(0)!r}: day first or month first? All {len(last)} dates fit both",
        "declare day_first = true or false, or write dates as year-month-day",
        where(row),
    )
    return None


def _all_zoned(
    matches: Sequence[re.Match[str] | None], where: Callable[[int], Location], problems: Problems
) -> bool | None:
    zoned = [bool(m and m.group("offset")) for m in matches]
    if all(zoned) or not any(zoned):
        return all(zoned)
    row = zoned.index(not zoned[0])
    with_zone, without = (0, row) if zoned[0] else (row, 0)
    problems.add(
        "zone-mixed",
        f"row {with_zone + 1} has a zone ({matches[with_zone].group('offset')}), "  # type: ignore[union-attr]
        f"row {without + 1} has none",
        "export all stamps with their offset, or all without and declare zone = ...",
        where(row),
    )
    return None


def _stamp(found: re.Match[str], *, day_first: bool) -> np.datetime64:
    import datetime as dt

    year = int(found.group("y"))
    if found.re is _YEAR_FIRST:
        month, day = int(found.group("mo")), int(found.group("d"))
    else:
        a, b = int(found.group("a")), int(found.group("b"))
        day, month = (a, b) if day_first else (b, a)
    hour, minute, second = (int(found.group(g) or 0) for g in ("h", "min", "s"))
    if found.group("ampm"):
        if not 1 <= hour <= 12:
            raise ValueError(hour)
        hour = hour % 12 + (12 if found.group("ampm").lower() == "pm" else 0)
    # 24:00 closes the day (ISO 8601); it is 00:00 of the next.
    extra = dt.timedelta(0)
    if hour == 24 and minute == second == 0:
        hour, extra = 0, dt.timedelta(days=1)
    micro = int((found.group("f") or "0").ljust(6, "0")[:6])
    stamp = dt.datetime(year, month, day, hour, minute, second, micro) + extra
    offset = found.group("offset")
    if offset and offset not in ("Z", "z", "UTC"):
        sign = -1 if offset[0] == "-" else 1
        digits = offset[1:].replace(":", "").ljust(4, "0")
        stamp -= sign * dt.timedelta(hours=int(digits[:2]), minutes=int(digits[2:]))
    return np.datetime64(stamp, "us")


# ------------------------------------------------------------------ zone


def localise(
    index: pd.DatetimeIndex,
    zone: str,
    repeated_hour: str | None,
    where: Callable[[int], Location],
    problems: Problems,
) -> tuple[pd.DatetimeIndex | None, tuple[Notice, ...]]:
    """Give stamps of a local clock their zone.

    In autumn an hour comes twice. When each of its stamps is there twice, in order, both halves are kept (each
    once); when each is there once, only the user can say which half it is.

    Parameters
    ----------
    index : DatetimeIndex of length N, without zone
    zone : str
        Name of the time zone data base (IANA).
    repeated_hour : {"both", "first", "second"}, optional
        What is in the file; None: find out.
    where, problems
        As in `parse_times`.
    """
    from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

    try:
        ZoneInfo(zone)
    except (ZoneInfoNotFoundError, ValueError, OSError):
        problems.add("zone-unknown", f"there is no time zone {zone!r}", "write e.g. Europe/Berlin or UTC", where(0))
        return None, ()
    early = index.tz_localize(zone, ambiguous=np.ones(len(index), dtype=bool), nonexistent="NaT")
    gone = np.flatnonzero(np.asarray(early.isna()))
    if gone.size:
        row = int(gone[0])
        problems.add(
            "hour-skipped",
            f"{index[row]} does not exist in {zone}: the clocks go forward over it ({gone.size} such stamps)",
            "the clock of the source keeps winter time or UTC: declare that zone, e.g. Etc/GMT-1",
            where(row),
        )
        return None, ()
    late = index.tz_localize(zone, ambiguous=np.zeros(len(index), dtype=bool), nonexistent="NaT")
    twofold = np.asarray(early != late)
    if not twofold.any():
        return early, ()
    if repeated_hour in ("first", "second"):
        chosen = early if repeated_hour == "first" else late
        return chosen, (_repeated_notice(index, twofold, f"taken as its {repeated_hour} half, as declared"),)
    first_half = _first_half(index, twofold)
    if first_half is None:
        row = int(np.flatnonzero(twofold)[0])
        problems.add(
            "repeated-hour",
            f"{index[row]} comes twice in {zone} when the clocks go back, but the file does not show both halves in "
            "order",
            "declare repeated_hour = first or second, or export with offsets",
            where(row),
        )
        return None, ()
    whole = index.tz_localize(zone, ambiguous=first_half)
    return whole, (_repeated_notice(index, twofold, "both halves are there and each is kept once"),)


def _first_half(index: pd.DatetimeIndex, twofold: npt.NDArray[np.bool_]) -> npt.NDArray[np.bool_] | None:
    """Return True for stamps of the first half; None unless every run of twofold stamps falls back exactly once."""
    out = np.ones(len(index), dtype=bool)
    rows = np.flatnonzero(twofold)
    stamps = index.asi8
    for run in np.split(rows, np.flatnonzero(np.diff(rows) > 1) + 1):
        back = np.flatnonzero(np.diff(stamps[run]) <= 0)
        if back.size != 1:
            return None
        out[run[back[0] + 1 :]] = False
    return out


def _repeated_notice(index: pd.DatetimeIndex, twofold: npt.NDArray[np.bool_], what: str) -> Notice:
    day = index[int(np.flatnonzero(twofold)[0])].date()
    return Notice("repeated-hour", f"the hour that the clocks repeat on {day} has {int(twofold.sum())} rows: {what}")


def check_zone_of(
    first: pd.DatetimeIndex, first_name: str, second: pd.DatetimeIndex, second_name: str, problems: Problems
) -> None:
    """Refuse to set stamps with a zone beside stamps without one."""
    if (first.tz is None) == (second.tz is None):
        return
    bare, zoned = (first_name, second_name) if first.tz is None else (second_name, first_name)
    other = second if first.tz is None else first
    offset = other[0].strftime("%z") if len(other) else ""
    problems.add(
        "zone-missing",
        f"{bare} has stamps without a zone, {zoned} has {offset[:3]}:{offset[3:]}",
        f"declare zone = ... for {bare}",
    )
