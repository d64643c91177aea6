"""The shape of a case file as pydantic models: which keys there are, and what each holds.

The models check the shape and make the JSON Schema. What a text says (a sigma, a unit, a sum of variables) is read by
the other modules of this room, which know more about the case than one field does.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

from ..campaign.options import ReadingModel

__all__ = ["CaseModel", "KnownModel", "MeterModel", "SettingsModel", "SharedErrorModel", "StreamModel"]

Text = Annotated[str, Field(min_length=1)]
SigmaText = Annotated[
    Any,
    Field(json_schema_extra={"anyOf": [{"type": "string"}, {"type": "number"}, {"type": "array", "minItems": 1}]}),
]
QuantityText = Annotated[Any, Field(json_schema_extra={"type": ["string", "number"]})]


class _Model(BaseModel):
    model_config = ConfigDict(extra="forbid", coerce_numbers_to_str=True)


class StreamModel(_Model):
    """A stream in long form; the domains of the case add their own keys."""

    model_config = ConfigDict(extra="allow", coerce_numbers_to_str=True)
    path: str = Field(description="Where it comes from and goes to: a -> b, with 'outside' for the environment")


class SigmaModel(_Model):
    """Keys that state an uncertainty."""

    sigma: SigmaText = Field(
        None,
        description="Standard uncertainty (k = 1): 1 % of reading, 2 % of span, 0.03 m3/h, "
        "default(2 % of reading) for a marked guess, or a list of components",
    )
    accuracy: SigmaText = Field(
        None, description="A limit, plus or minus: taken as rectangular, sigma = limit/sqrt(3) (GUM 4.3.7)"
    )
    expanded: SigmaText = Field(None, description="Expanded uncertainty of a certificate; needs coverage")
    coverage: Any = Field(
        None, description="Coverage factor k of the certificate, usually 2", json_schema_extra={"type": "number"}
    )


class MeterModel(SigmaModel):
    """An instrument."""

    reads: str = Field(description="What it reads: supply.flow, or a sum such as a.flow + b.flow")
    unit: Any = Field(None, description="Unit of its readings", json_schema_extra={"type": "string"})
    resolution: Any = Field(
        None,
        description="Step of a digital display; adds step/(2 sqrt(3)) in quadrature (GUM F.2.2.1)",
        json_schema_extra={"type": "string"},
    )
    span: Any = Field(None, description="Range of the meter, e.g. 0 to 40 L/min", json_schema_extra={"type": "string"})
    description: str | None = Field(None, description="Free text for the report")
    fault_rate: float | None = Field(
        None, gt=0, lt=1, description="Probability that this meter is at fault before any reading is seen"
    )
    calibrated: Any = Field(
        None,
        description="Dates on which it was calibrated or exchanged, e.g. [2024-03-01]; its track begins anew there",
        json_schema_extra={"anyOf": [{"type": "string"}, {"type": "array", "minItems": 1}]},
    )
    reading: ReadingModel | None = Field(None, description="How its column is read")


class KnownModel(SigmaModel):
    """A value that no instrument reads."""

    value: QuantityText = Field(description="Value with its unit, e.g. 3.2 mmHg min/L")


class SharedErrorModel(_Model):
    """One cause behind several meters."""

    sigma: Any = Field(
        None,
        description="Contribution to every meter, or one for each: {FT-1: 1 % of reading, FT-2: 0.2 L/min}",
        json_schema_extra={
            "anyOf": [{"type": "string"}, {"type": "array", "minItems": 1}, {"type": "object"}],
        },
    )
    meters: list[Any] = Field(description="Tags of the meters it moves", min_length=2)
    correlations: list[Any] | None = Field(
        None,
        description="Pairs [tag, tag, correlation] if the meters do not move fully together",
    )


class SettingsModel(_Model):
    """How the case is to be judged."""

    level: float = Field(0.05, gt=0, lt=1, description="Chance of a false alarm that the tests may take")
    power: float = Field(0.90, gt=0, lt=1, description="Chance of noticing a fault of the smallest detectable size")
    max_faults: int | None = Field(
        None, ge=0, description="Most faults that an explanation may combine; null leaves it to the program"
    )
    percent_at: Literal["adjusted", "reading"] = Field(
        "adjusted", description="At which value a sigma in percent is evaluated"
    )
    fault_rate: float = Field(0.02, gt=0, lt=1, description="Probability that a given meter is at fault")
    leak_rate: float = Field(0.01, gt=0, lt=1, description="Probability that a given node leaks")


class CaseModel(_Model):
    """A case file from the top."""

    reconcile: Any = Field(description="Version of this format: 1", json_schema_extra={"const": 1})
    title: str = Field("", description="Free text for the report")
    domains: dict[str, Any] = Field(description="Subjects whose balances hold, each with its options", min_length=1)
    needs: dict[str, Any] | None = Field(
        None, description="Oldest version of a domain that the case works with, e.g. elements: at least 1.2"
    )
    nodes: dict[str, Any] | None = Field(None, description="Nodes that need options")
    streams: dict[str, Any] | str = Field(description="Streams as name: a -> b, or the name of a table file")
    meters: dict[str, Any] | str | None = Field(None, description="Instruments by tag, or the name of a table file")
    known: dict[str, Any] | None = Field(None, description="Constants and prior knowledge, by variable")
    shared_errors: dict[str, Any] | None = Field(None, description="One cause, several meters")
    bounds: dict[str, Any] | None = Field(None, description="Limits of variables, e.g. at least 0 L/min")
    design: dict[str, Any] | None = Field(None, description="Expected values, for planning before any reading")
    figures: dict[str, Any] | None = Field(None, description="Derived values as formulas of variables")
    readings: Any = Field(None, description="File of the readings, or a block that says how to read it")
    windows: Any = Field(None, description="How a log is cut into snapshots")
    lab: Any = Field(None, description="File of laboratory samples, set beside the plant's readings")
    line_ups: dict[str, Any] | None = Field(None, description="Streams that are closed in some windows, by name")
    trajectory: dict[str, Any] | None = Field(
        None, description="Windows that follow one another, tied by inventories: inventories, read_at, step, ..."
    )
    settings: Any = Field(None, description="How the case is to be judged")
