"""What a case may say about its log: how a column is read, how windows are cut, where laboratory values come from.

Shapes only; what the texts mean (quantities, durations, conditions) is read by `read`.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

__all__ = [
    "CounterModel",
    "FindLagModel",
    "LabModel",
    "LevelModel",
    "LimitsModel",
    "LineUpModel",
    "ReadingModel",
    "SpanModel",
    "WindowsModel",
]

QuantityText = Annotated[Any, Field(json_schema_extra={"type": ["string", "number"]})]


class _Block(BaseModel):
    model_config = ConfigDict(extra="forbid", coerce_numbers_to_str=True)


class CounterModel(_Block):
    """A total that only ever rises; it becomes what passed in each window."""

    rolls_over_at: float | None = Field(
        None, gt=0, description="Value at which it begins again at zero: 100000 for five figures"
    )
    starts_again: bool = Field(
        False,
        description="It may be set to zero (new batch, power failure); what passed meanwhile is estimated from its "
        "neighbours and marked so",
    )
    pulse: QuantityText = Field(
        None, description="What one count is worth, e.g. 0.5 L; one unit of the meter when left out"
    )
    largest_rate: QuantityText = Field(
        None, description="Largest flow that can pass, e.g. 30 kg/h; a faster step is not counted"
    )
    each_reading: QuantityText = Field(
        None,
        description="Standard uncertainty of one reading of the counter; one count over sqrt(12) when left out (GUM F.2.2.1)",
    )


class LevelModel(_Block):
    """The level of a tank; it becomes the change of what the tank holds."""

    unit: str = Field(description="Unit of the column, e.g. % or m")
    holds: QuantityText = Field(None, description="What one unit of level holds, e.g. 4.0 kg; or give a table")
    table: list[tuple[float, float]] | None = Field(
        None, min_length=2, description="Pairs of level and content, both rising; content in content_unit"
    )
    content_unit: str | None = Field(None, description="Unit of the contents of the table, e.g. L")
    each_reading: QuantityText = Field(
        None, description="Standard uncertainty of one reading of the level, independent from one to the next"
    )


class FindLagModel(_Block):
    """A dead time that is found from the readings."""

    between: str = Field(description="Range that is tried, e.g. 0 to 20 min")
    behind: str = Field(description="Tag of the column that shows the same change earlier")


class LimitsModel(_Block):
    """Tests of the single signal; each leaves out what it finds, with a reason per cell."""

    possible: str | None = Field(None, description="Range outside which a reading cannot be, e.g. 0 to 60 kg/h")
    spike: QuantityText = Field(None, description="Largest distance from the mean of both neighbours, e.g. 5 kg/h")
    change_per_minute: QuantityText = Field(None, description="Largest change in a minute, e.g. 2 kg/h")
    flat_for: int | None = Field(None, ge=2, description="So many equal readings in a row are a frozen signal")
    flat_within: QuantityText = Field(None, description="Readings closer than this are equal")
    gap: QuantityText = Field(None, description="Longest time without a reading that is not told, e.g. 10 min")
    saturates: bool = Field(
        True, description="A reading at the end of the meter's span is a bound of the true value, not a value"
    )


class ReadingModel(_Block):
    """How the column of a meter is read."""

    column: str | None = Field(None, min_length=1, description="Header of its column where that is not the tag")
    counter: CounterModel | None = Field(None, description="The column is a total that only ever rises")
    level: LevelModel | None = Field(None, description="The column is a level; the meter reads the change of inventory")
    lag: QuantityText = Field(None, description="The meter shows what passed this much earlier, e.g. 8 min")
    find_lag: FindLagModel | None = Field(None, description="Find that dead time from the readings")
    limits: LimitsModel | None = Field(None, description="Which readings cannot be")
    sample: bool = Field(False, description="The values are in the file that stands under lab:")
    noise: QuantityText = Field(
        None,
        description="Part of one reading that is independent from reading to reading, as standard uncertainty; taken "
        "from the scatter in each window when left out",
    )
    steady_within: QuantityText = Field(
        None, description="Change over a window that does not matter, however significant it is"
    )
    censored: Literal["interval", "leave out"] = Field(
        "interval",
        description="What '<0.05' becomes: the middle of its interval with a rectangular sigma (GUM 4.3.7), both ends "
        "solved as well; or nothing",
    )
    calculated: bool | None = Field(
        None,
        description="True: calculated from other columns, adds no check. False: read by an instrument even if it "
        "equals others to the last digit. Found out when left out",
    )


class SpanModel(_Block):
    """One window by its times."""

    name: str | None = Field(None, description="Name in the results; its start when left out")
    start: Any = Field(description="First stamp of the window", json_schema_extra={"type": "string"})
    end: Any = Field(description="Stamp at which it ends, not part of it", json_schema_extra={"type": "string"})


class WindowsModel(_Block):
    """How a log is cut into snapshots."""

    length: QuantityText = Field(None, description="Windows of equal length, e.g. 20 min")
    rows: int | None = Field(None, ge=1, description="Windows of so many rows")
    by: str | None = Field(None, description="Column whose value names the window, e.g. batch")
    at: list[SpanModel] | None = Field(None, min_length=1, description="Windows by their times")
    whole: bool = Field(False, description="The whole record is one window")
    least_coverage: float = Field(
        0.5, gt=0, le=1, description="Share of its rows that must hold a good reading for a mean"
    )
    required: list[str] = Field(default_factory=list, description="Tags without which a window is left out")
    steady: Literal["slope", "ratio", "both", "none"] = Field(
        "slope",
        description="Test of steadiness: slope of a straight line; ratio of two variances (Cao & Rhinehart 1995)",
    )
    steady_level: float | None = Field(
        None, gt=0, lt=1, description="Level of that test; 0.001 for slope and 0.01 for ratio when left out"
    )
    steady_readings: list[str] | None = Field(
        None, description="Tags that must be steady; all that are averaged when left out"
    )
    keep_unsteady: bool = Field(
        False, description="Keep windows that are not steady, since an inventory that is read takes up the change"
    )
    runs_when: str | None = Field(
        None, description="The plant runs when this holds: a column of flags, or e.g. 'F > 2 kg/h'"
    )
    hold_up: QuantityText = Field(None, description="Time that material stays in the plant, e.g. 45 min")
    scatter: Literal["add", "included"] = Field(
        "add",
        description="Whether the scatter of the samples adds to a meter's sigma (which then is the part that does not "
        "average, calibration), or that sigma is already that of a window",
    )


class LabModel(BaseModel):
    """A file of laboratory samples; keys that say how the file is read may stand here as well."""

    model_config = ConfigDict(extra="allow", coerce_numbers_to_str=True)
    file: str = Field(description="File with a row a sample and the time at which it was drawn")
    before: QuantityText = Field("10 min", description="Time before the sample over which plant readings are averaged")
    after: QuantityText = Field("0 min", description="Time after it; for a composite sample, while it was collected")
    told_from: float = Field(0.05, gt=0, description="Relative change of a plant reading within that time that is told")


class LineUpModel(_Block):
    """Streams that are closed in some windows."""

    closed: list[str] = Field(min_length=1, description="Streams without flow in this line-up")
    when: str | None = Field(None, description="Column and value that show it, e.g. 'valve = shut' or 'XV-3 < 0.5'")
    windows: list[Any] | None = Field(None, min_length=1, description="Names of the windows in which it holds")
