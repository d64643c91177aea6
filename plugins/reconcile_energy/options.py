"""What a case file may say to the energy domain."""

from __future__ import annotations

from typing import Literal

from pydantic import BaseModel, ConfigDict, Field

__all__ = ["EnergyNode", "EnergyOptions", "EnergyStream", "Heat", "Medium"]

Medium = Literal["water", "steam", "saturated"]
Heat = Literal["supplied", "removed"]


class EnergyOptions(BaseModel):
    """Options under ``domains: {energy: ...}``."""

    model_config = ConfigDict(extra="forbid")
    unit: str = Field("kW", description="Unit of heat flows, e.g. kW or MJ/h")
    temperature: str = Field("degC", description="Unit of stream.temperature")
    pressure: str = Field("bar", description="Unit of stream.pressure, absolute")
    heat_capacity: str | float | None = Field(
        None, description="Heat capacity of the streams that state none, e.g. 4.18 kJ/(kg K)"
    )
    density: str | float | None = Field(
        None, description="Density of the streams that state none, e.g. 992 kg/m3; needed where flows are volumes"
    )
    reference: str | None = Field(
        None,
        description="Temperature at which streams of constant heat capacity carry no heat, e.g. 20 degC; "
        "0.01 degC when left out, where the steam tables have their zero",
    )
    losses: bool = Field(True, description="Whether a heat loss at each node is considered as a possible fault")


class EnergyStream(BaseModel):
    """Keys of a stream that the energy domain reads."""

    model_config = ConfigDict(extra="forbid")
    heat_capacity: str | float | None = Field(None, description="Heat capacity, e.g. 4.18 kJ/(kg K)")
    density: str | float | None = Field(None, description="Density at the flow meter, e.g. 992 kg/m3")
    medium: Medium | None = Field(
        None,
        description="water (liquid), steam (superheated) or saturated (wet steam, or condensate at its boiling point), "
        "by the industrial formulation IAPWS-IF97; needs the extra 'steam'",
    )
    pressure: str | float | None = Field(
        None, description="Absolute pressure of water or steam, e.g. 5 bar; left out, stream.pressure is a variable"
    )
    quality: float | None = Field(
        None, ge=0, le=1, description="Mass fraction of vapour in saturated steam; left out, it is a variable"
    )


class EnergyNode(BaseModel):
    """Keys of a node that the energy domain reads."""

    model_config = ConfigDict(extra="forbid")
    heat: bool | Heat = Field(
        False,
        description="Whether heat is supplied to the streams or removed from them here; true means supplied. "
        "It is the variable node.duty, counted positive in that direction",
    )
    exchanges_with: str | None = Field(
        None,
        description="Node of the other, colder side of a heat exchanger; the heat that passes is the variable "
        "node.transfer of the warmer side",
    )
    loss: bool = Field(False, description="Whether a heat loss to the surroundings is expected: node.heat_loss >= 0")
    splits: bool = Field(False, description="All streams that leave have one temperature (a tee, a well-mixed tank)")
    leak_of: str | None = Field(None, description="Stream whose temperature a leak has here")
