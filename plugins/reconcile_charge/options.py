"""What a case may say to the charge domain."""

from __future__ import annotations

from pydantic import BaseModel, ConfigDict, Field


class Ion(BaseModel):
    """An ion of a solution."""

    model_config = ConfigDict(extra="forbid")
    charge: int = Field(description="Charge number with its sign, e.g. 2 or -1")
    unit: str = Field("meq/L", description="Unit of its concentration: meq/L, mmol/L or mg/L (or multiples)")
    analysed_as: str | None = Field(
        None,
        alias="as",
        description="For mass concentrations: what the mass is counted as, e.g. N for nitrate given as nitrogen, NO3 for "
        "nitrate itself, CaCO3 for alkalinity or hardness; an element or formula, or CaCO3 (50.04 g per equivalent)",
    )


class Electrolysis(BaseModel):
    """Faraday's law between a current and what it makes or uses up."""

    model_config = ConfigDict(extra="forbid")
    current: str = Field(description="Variable of the current, e.g. supply.current")
    products: dict[str, float] = Field(
        description="Molar rates and electrons for each, e.g. {gas.H2: 2}; all of them together carry the charge"
    )
    unit: str = Field("mol/h", description="Unit of the molar rates, where this domain declares them")
    efficiency: bool = Field(
        False, description="Whether a current efficiency between 0 and 1 is a variable (cell.efficiency); else it is 1"
    )


class ChargeOptions(BaseModel):
    """Options under ``domains: {charge: ...}``."""

    model_config = ConfigDict(extra="forbid")
    unit: str = Field("A", description="Unit of currents (A) or of charges over one period (A h)")
    circuit: bool = Field(
        True, description="Whether the streams of the case are conductors, so that currents balance at every node"
    )
    leakage: bool = Field(True, description="Leakage to earth at each node as a possible fault, in either direction")
    potential_unit: str = Field("V", description="Unit of potentials, where a stream has a resistance")
    solutions: dict[str, dict[str, Ion]] = Field(
        default_factory=dict, description="Samples and their ions; the equivalents of each sample add up to zero"
    )
    electrolysis: dict[str, Electrolysis] = Field(default_factory=dict, description="Cells by name")


class ChargeStream(BaseModel):
    """Keys of a stream (conductor) that the charge domain reads."""

    model_config = ConfigDict(extra="forbid")
    conductor: bool = Field(
        False, description="The conductor has a resistance (stream.resistance) between the potentials of its ends"
    )
    source: bool = Field(
        False, description="The conductor holds a source of voltage (stream.emf), raising the potential"
    )


class ChargeNode(BaseModel):
    """Keys of a node that the charge domain reads."""

    model_config = ConfigDict(extra="forbid")
    reference: bool = Field(False, description="The node whose potential is zero")
