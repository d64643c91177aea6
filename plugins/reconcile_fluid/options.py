"""What a case may say to the fluid domain."""

from __future__ import annotations

from typing import Literal

from pydantic import BaseModel, ConfigDict, Field


class FluidOptions(BaseModel):
    """Options under ``domains: {fluid: ...}``."""

    model_config = ConfigDict(extra="forbid")
    unit: str = Field(description="Unit of every flow in the network, mass or volume per time, e.g. kg/h or L/min")
    conserve: Literal["mass", "volume"] | None = Field(
        None,
        description="What the balances conserve: mass (flows in volume units then need a density each) or volume "
        "(only where all densities are equal). Mass for flows in mass units, else volume, when left out",
    )
    leaks: Literal["out", "both", "none"] = Field(
        "out",
        description="Losses at nodes as possible faults: only outwards, also inwards (air or water drawn in), or none",
    )
    pressure_unit: str = Field("kPa", description="Unit of pressures, where a stream has a resistance")
    ambient_pressure: str = Field(
        "0 kPa", description="Pressure of the outside, on the same gauge or absolute scale as the readings"
    )


class FluidStream(BaseModel):
    """Keys of a stream that the fluid domain reads."""

    model_config = ConfigDict(extra="forbid")
    density: str | None = Field(None, description="Density of the stream, e.g. 1.02 kg/L")
    resistance: Literal["laminar", "turbulent"] | None = Field(
        None,
        description="The stream has a resistance R to flow: pressure drop R q (laminar) or R q |q| (turbulent). R is "
        "stream.resistance: state it under known, with a sigma if it is uncertain, or leave it unknown",
    )
    rise: str | None = Field(
        None, description="Height gained along a stream with a resistance, e.g. 0.4 m; needs a density"
    )
    closed: bool = Field(False, description="The stream is closed off: its flow is exactly zero")


class FluidNode(BaseModel):
    """Keys of a node that the fluid domain reads."""

    model_config = ConfigDict(extra="forbid")
    stores: bool = Field(False, description="Whether an inventory in the node may change; adds node.accumulation")
    evaporates: bool = Field(
        False, description="Whether fluid may evaporate there; adds node.evaporation, not below zero"
    )
