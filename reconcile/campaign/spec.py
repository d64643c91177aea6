"""What a case says about its log, checked and in numbers: seconds, and the units of the meters."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import datetime
from typing import Any, Literal

from ..readings.counters import CounterRule
from ..readings.levels import LevelTable
from ..readings.validity import SignalLimits

__all__ = ["CampaignSpec", "Condition", "LabSpec", "LineUpSpec", "ReadingSpec", "WindowSpec"]


@dataclass(frozen=True)
class Condition:
    """A column, and what it must be: above or below a number, equal to a word, or simply on."""

    column: str
    sign: Literal["", ">", "<", "="] = ""
    value: str = ""


@dataclass(frozen=True)
class ReadingSpec:
    """How the column of one meter is read; quantities in the meter's unit unless said otherwise.

    Attributes
    ----------
    column : str or None
        Header of the column, where it is not the tag.
    counter : CounterRule or None
        Increments already in the meter's unit; times `per` where that is a rate.
    level : LevelTable or None
        Contents likewise.
    amount_unit : str
        Unit in which increments and contents are told to people.
    amount_factor : float
        Increments of `counter` per `amount_unit`.
    per : float or None
        Seconds of the unit of time, where the meter's unit is a rate.
    column_unit : str or None
        Unit of the column where it is not the meter's; empty for a bare count.
    level_sigma : float
        Of one reading of the level, in `column_unit`.
    lag, lag_range : seconds
    behind : str
        Column that the lag is sought against.
    limits : SignalLimits
    noise, steady_within : float or None
    calibrated : tuple of datetime
    sample : bool
    censored : 'interval' or 'leave out'
    calculated : bool or None
    """

    column: str | None = None
    counter: CounterRule | None = None
    level: LevelTable | None = None
    amount_unit: str = ""
    amount_factor: float = 1.0
    per: float | None = None
    column_unit: str | None = None
    level_sigma: float = 0.0
    lag: float | None = None
    lag_range: tuple[float, float] | None = None
    behind: str = ""
    limits: SignalLimits = field(default_factory=SignalLimits)
    noise: float | None = None
    steady_within: float | None = None
    calibrated: tuple[datetime, ...] = ()
    sample: bool = False
    censored: Literal["interval", "leave out"] = "interval"
    calculated: bool | None = None


@dataclass(frozen=True)
class WindowSpec:
    """How windows are cut and judged; times in seconds. One of the first five says where they are cut."""

    length: float | None = None
    rows: int | None = None
    by: str | None = None
    at: tuple[tuple[str, str, str], ...] | None = None
    whole: bool = False
    least_coverage: float = 0.5
    required: tuple[str, ...] = ()
    slope_level: float | None = 0.001
    ratio_level: float | None = None
    steady_readings: tuple[str, ...] | None = None
    keep_unsteady: bool = False
    runs_when: Condition | None = None
    hold_up: float | None = None
    scatter: Literal["add", "included"] = "add"


@dataclass(frozen=True)
class LabSpec:
    """Where laboratory values come from, and how plant readings are set beside them; times in seconds."""

    file: str
    before: float
    after: float
    told_from: float
    options: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class LineUpSpec:
    """Streams that are closed in the windows named, or where a condition holds."""

    name: str
    closed: tuple[str, ...]
    when: Condition | None = None
    windows: tuple[str, ...] = ()


@dataclass(frozen=True)
class CampaignSpec:
    """All that a case says about its log; empty for one that says nothing."""

    readings: Mapping[str, ReadingSpec] = field(default_factory=dict)
    windows: WindowSpec | None = None
    lab: LabSpec | None = None
    line_ups: Mapping[str, LineUpSpec] = field(default_factory=dict)

    def of(self, tag: str) -> ReadingSpec:
        """How the column of a meter is read."""
        return self.readings.get(tag, _PLAIN)

    @property
    def samples(self) -> tuple[str, ...]:
        """Tags whose values the laboratory gives."""
        return tuple(t for t, r in self.readings.items() if r.sample)

    def columns(self, tags: tuple[str, ...]) -> tuple[str, ...]:
        """Columns of the log that are no meters, but are needed."""
        conditions = [self.windows.runs_when] if self.windows else []
        conditions += [u.when for u in self.line_ups.values()]
        named = [c.column for c in conditions if c is not None]
        if self.windows and self.windows.by:
            named.append(self.windows.by)
        return tuple(dict.fromkeys(n for n in named if n not in tags))


_PLAIN = ReadingSpec()
