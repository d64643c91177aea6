"""What a case may say to the perfusion domain."""

from __future__ import annotations

from pydantic import BaseModel, ConfigDict, Field


class Solute(BaseModel):
    """A solute that is carried by the streams."""

    model_config = ConfigDict(extra="forbid")
    unit: str = Field(description="Unit of its concentration, one for all streams, e.g. mmol/L or mg/dL")
    uptake: list[str] = Field(
        default_factory=list,
        description="Nodes that take it up (or, if negative, release it): adds node.SOLUTE_uptake",
    )


class Blood(BaseModel):
    """Oxygen carried by haemoglobin and in solution."""

    model_config = ConfigDict(extra="forbid")
    streams: list[str] = Field(description="Streams that carry blood or perfusate with haemoglobin")
    uptake: list[str] = Field(default_factory=list, description="Nodes that take oxygen up: adds node.oxygen_uptake")
    huefner: float = Field(1.365, description="Oxygen bound per gram of haemoglobin, mL/g; values in use: 1.34 to 1.39")
    huefner_sigma: float = Field(0.015, gt=0, description="Its standard uncertainty, shared by all streams, mL/g")
    solubility: float = Field(0.0031, ge=0, description="Oxygen in solution, mL/dL per mmHg")


class PerfusionOptions(BaseModel):
    """Options under ``domains: {perfusion: ...}``."""

    model_config = ConfigDict(extra="forbid")
    solutes: dict[str, Solute] = Field(default_factory=dict, description="Solutes by name; variables stream.SOLUTE")
    blood: Blood | None = Field(None, description="Oxygen content from haemoglobin, saturation and pO2")


class PerfusionStream(BaseModel):
    """Keys of a stream that the perfusion domain reads."""

    model_config = ConfigDict(extra="forbid")
    water_fraction: float = Field(
        1.0, gt=0, le=1, description="Share of the flow that carries solutes; about 0.86 to 0.93 for whole blood"
    )
    free_of: list[str] = Field(
        default_factory=list, description="Solutes whose concentration in the stream is exactly zero"
    )


class PerfusionNode(BaseModel):
    """Keys of a node that the perfusion domain reads."""

    model_config = ConfigDict(extra="forbid")
    loses_like: str | None = Field(
        None, description="Stream with whose composition a loss at the node leaves; the first outflow when left out"
    )
