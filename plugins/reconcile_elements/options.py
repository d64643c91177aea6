"""What a case file may say to the elements domain: checked models, each error at its own line."""

from __future__ import annotations

import re
from collections.abc import Callable
from typing import Annotated, Any, Literal, TypeVar

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field
from pydantic_core import PydanticCustomError

from .formula import parse_formula
from .gas import conditions
from .refusal import Mistake, Refusal

__all__ = ["ElementsNode", "ElementsOptions", "ElementsStream", "Weighed", "require_basis", "unit_parts"]

T = TypeVar("T")

_RESERVED = {
    "air_drawn_in",
    "atoms",
    "carbon_fraction",
    "current",
    "degree_of_reduction",
    "gas_lost",
    "total",
    "volume_flow",
}
_MASS = {"k": "kg", "": "g", "m": "mg", "u": "ug", "µ": "ug", "n": "ng"}
_VOLUME = {"k": "m3", "": "L", "m": "mL", "u": "uL", "µ": "uL", "n": "nL"}
_SECONDS = {"s": 1.0, "min": 60.0, "h": 3600.0, "d": 86400.0, "day": 86400.0}
_SCALE = {"k": 1e3, "": 1.0, "m": 1e-3, "u": 1e-6, "µ": 1e-6, "n": 1e-9}


def _located(check: Callable[[T], object]) -> Callable[[T], T]:
    """Let pydantic see our refusals, so that they are located like its own."""

    def validate(value: T) -> T:
        try:
            check(value)
        except Refusal as error:
            raise PydanticCustomError("refusal", "{text}", {"text": str(error)}) from error
        return value

    return validate


def _check_name(name: str) -> None:
    if not re.fullmatch(r"[A-Za-z0-9_-]+", name) or name in _RESERVED:
        raise Refusal(
            Mistake(
                "species-name",
                f"{name!r} cannot name a species or a reaction",
                f"use letters, digits, _ and -, and none of {', '.join(sorted(_RESERVED))}",
            )
        )


def require_basis(value: object) -> None:
    """Refuse a gas of which it is not said whether it is dry or wet."""
    if value not in ("dry", "wet", None):
        raise Refusal(
            Mistake(
                "wet-or-dry",
                f"gas: {str(value).lower()} does not say whether fractions and flow are of the wet or the dry gas",
                "write gas: dry (water taken out before the analyser) or gas: wet. At 30 C the two differ by 4 %",
            )
        )


def _check_sigmas(value: dict[str, float]) -> None:
    wrong = [k for k, v in value.items() if not v > 0]
    if wrong:
        raise Refusal(
            Mistake("sigma-not-positive", f"the sigma of {wrong[0]} is not above zero", "leave out what is exact")
        )


Name = Annotated[str, AfterValidator(_located(_check_name))]
FormulaText = Annotated[str, AfterValidator(_located(parse_formula))]
Basis = Annotated[Literal["dry", "wet"] | None, BeforeValidator(_located(require_basis))]


class Weighed(BaseModel):
    """How the mass of a species becomes an amount."""

    model_config = ConfigDict(extra="forbid")
    carbon_fraction: float | None = Field(
        None, gt=0, le=1, description="Gram of carbon per gram as weighed, ash and water included"
    )
    sigma: float | None = Field(
        None, gt=0, description="Standard uncertainty of the carbon fraction; exact if left out"
    )


class ElementsOptions(BaseModel):
    """Options under ``domains: {elements: ...}``."""

    model_config = ConfigDict(extra="forbid")
    unit: Annotated[str, AfterValidator(_located(lambda text: unit_parts(text)))] = Field(
        "mol/h",
        description="Unit of every amount, e.g. mol/h or mmol/L/h; a C-mol of a formula written per carbon is its mol",
    )
    species: dict[Name, FormulaText] = Field(min_length=1, description="Name to formula, e.g. glucose: C6H12O6")
    inert: list[str] = Field([], description="Species that react nowhere, e.g. the nitrogen of the air")
    conserve: list[str] | None = Field(
        None,
        description="Balances at nodes that react: elements, charge, reduction (of degree); every element and charge "
        "when left out",
    )
    nitrogen_source: str | None = Field(
        None, description="NH3, NO3 or N2: where the degree of reduction counts nitrogen from"
    )
    references: dict[str, FormulaText] = Field(
        {}, description="Element to the compound that its electrons are counted from, e.g. S: H2S"
    )
    reactions: dict[Name, str] = Field({}, description="Name to reaction, e.g. glucose + 6 oxygen -> 6 water + ...")
    reaction_tolerance: float = Field(
        0.0, ge=0, le=0.01, description="Relative gap allowed to reactions with rounded coefficients"
    )
    hidden: dict[Name, FormulaText] = Field(
        {}, description="Products that may form unseen, name to formula: possible faults of nodes that react"
    )
    uncertain: dict[str, Annotated[dict[str, float], AfterValidator(_located(_check_sigmas))]] = Field(
        {},
        description="Species to the sigmas of its subscripts, or of its degree of reduction (reduction: 0.13)",
    )
    weighed: dict[str, Weighed] = Field({}, description="Species that are also given as mass")
    air: dict[str, float] | None = Field(
        None, description="Mole fractions of air by species, for air drawn in; oxygen 0.2095 if left out"
    )


class ElementsStream(BaseModel):
    """Keys of a stream that the elements domain reads."""

    model_config = ConfigDict(extra="forbid")
    species: str | list[str] | None = Field(
        None, description="What the stream holds; may be left out if it is named like a species"
    )
    composition: dict[str, float | Literal["rest"]] | None = Field(
        None, description="Known mole fractions of the stream, e.g. {oxygen: 0.2095, nitrogen: rest}"
    )
    gas: Basis = Field(None, description="dry or wet: the gas that fractions and flow are of")
    volume_at: Annotated[str, AfterValidator(_located(conditions))] | None = Field(
        None, description="Conditions of the volume flow of a gas, e.g. 0 C, 101.325 kPa"
    )
    current: bool = Field(False, description="Whether this stream of electrons is read as a current in A")
    can_leak: bool | None = Field(
        None, description="Whether a loss before the meter is a possible fault; gases only if left out"
    )


class ElementsNode(BaseModel):
    """Keys of a node that the elements domain reads."""

    model_config = ConfigDict(extra="forbid")
    reacts: bool | list[str] = Field(
        False, description="true: only elements are conserved; a list: these reactions and no other; false: it mixes"
    )
    accumulates: list[str] = Field([], description="Species whose inventory in the node may change")


def unit_parts(unit: str) -> dict[str, Any]:
    """Take apart an amount-per-time unit.

    Parameters
    ----------
    unit : str
        E.g. ``mol/h``, ``mmol/min``, ``mmol/L/h``.

    Returns
    -------
    dict
        ``mass`` and ``volume``: units in which g/mol and L/mol need no further factor (``mg/L/h`` for
        ``mmol/L/h``); ``mol_per_second``: factor, or None where the unit is not an amount per time alone.
    """
    found = re.fullmatch(r"(k|m|u|µ|n)?mol\s*/\s*(\S.*)", unit.strip())
    if not found:
        raise Refusal(
            Mistake("amount-unit", f"{unit!r} is not an amount per time", "write e.g. mol/h, mmol/min or mmol/L/h")
        )
    prefix, per = found[1] or "", found[2]
    seconds = _SECONDS.get(per)
    return {
        "mass": f"{_MASS[prefix]}/{per}",
        "volume": f"{_VOLUME[prefix]}/{per}",
        "mol_per_second": _SCALE[prefix] / seconds if seconds else None,
    }
