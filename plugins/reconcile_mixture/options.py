"""What a case file may say to the mixture domain."""

from __future__ import annotations

import re
from typing import Annotated, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, Field

__all__ = ["Component", "MixtureNode", "MixtureOptions", "MixtureStream", "Phase", "PulpDensity"]

Phase = Literal["stream", "solids", "liquid"]

_RESERVED = {
    "accumulation",
    "density",
    "flow",
    "holdup",
    "leak",
    "liquid",
    "loss",
    "moisture",
    "remainder",
    "rest",
    "solids",
    "solids_density",
    "solids_flow",
    "spill",
    "temperature",
    "wrong_density",
}


def _check_name(name: str) -> str:
    if not re.fullmatch(r"[A-Za-z0-9_-]+", name) or name in _RESERVED:
        raise ValueError(
            f"{name!r} cannot name a component: use letters, digits, _ and -, "
            f"and none of {', '.join(sorted(_RESERVED))}"
        )
    return name


Name = Annotated[str, AfterValidator(_check_name)]


class Component(BaseModel):
    """A component and the basis of its fractions."""

    model_config = ConfigDict(extra="forbid")
    unit: str | None = Field(None, description="Unit of the fraction: fraction, '%', g/t, mg/kg, kg/kg, ...")
    of: Phase | None = Field(
        None,
        description="What it is a fraction of: the whole stream, its dry solids (usual for metal assays of slurries), "
        "or its liquid. Left out: the dry solids where solids are declared, else the stream",
    )


class Ore(BaseModel):
    """Dry solids of one kind."""

    model_config = ConfigDict(extra="forbid")
    solids: float | None = Field(None, gt=0, description="Density of the dry solids; unknown when left out")
    sigma: float | None = Field(None, gt=0, description="Its standard uncertainty; exact when left out")


class PulpDensity(Ore):
    """Density of slurries, in one unit."""

    unit: str = Field(description="Unit of all densities, e.g. kg/L or t/m3")
    liquid: float = Field(gt=0, description="Density of the liquid, e.g. 0.998 kg/L for water at 20 degC")
    ores: dict[str, Ore] = Field(
        default_factory=dict, description="Further kinds of solids; a stream names its own by `ore`"
    )


class MixtureOptions(BaseModel):
    """Options under ``domains: {mixture: ...}``."""

    model_config = ConfigDict(extra="forbid")
    unit: str | None = Field(
        None, description="Unit of the flows, mass per time; left out where another domain declares the flows"
    )
    components: list[Name] | dict[Name, str | Component] = Field(
        description="Names of the components; as a mapping, each with its unit or with {unit: ..., of: ...}"
    )
    basis: str = Field("fraction", description="Unit of the components that do not state their own")
    complete: bool | list[Phase] = Field(
        False,
        description="Whether the components listed are all there are, so that their fractions sum to 1; "
        "or of which phases this is so",
    )
    solids: str | None = Field(None, description="Unit of the solids fraction, for slurries and moist solids")
    moisture: bool = Field(False, description="Whether stream.moisture, 1 minus the solids fraction, is read")
    density: PulpDensity | None = Field(None, description="Ties pulp densities to solids fractions")
    losses: bool = Field(True, description="Whether losses of a stream's material are considered as possible faults")
    holdup: bool = Field(
        True, description="Whether a component that gathers in a node, or leaves it, is considered as a possible fault"
    )


class MixtureStream(BaseModel):
    """Keys of a stream that the mixture domain reads."""

    model_config = ConfigDict(extra="forbid")
    pure: str | None = Field(
        None,
        description="The stream is nothing but this component, 'solids', 'liquid', or 'rest' (nothing that is listed)",
    )
    ore: str | None = Field(None, description="Kind of its solids, one of density.ores")


class MixtureNode(BaseModel):
    """Keys of a node that the mixture domain reads."""

    model_config = ConfigDict(extra="forbid")
    splits: bool = Field(False, description="All streams that leave have one composition (a tee, a well-mixed tank)")
    stores: bool = Field(False, description="Whether an inventory in the node may change")
    leak_of: str | None = Field(None, description="Stream whose composition a leak of the fluid domain has here")
    loses: list[str] = Field(
        default_factory=list,
        description="Components that may be lost here in pure form, e.g. water that evaporates; "
        "also 'solids' and 'liquid'",
    )
