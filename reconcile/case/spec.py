"""What a case says, checked and in plain frozen objects: all that the rest of the program sees of a case file."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

from ..errors import Location

if TYPE_CHECKING:
    from pydantic import BaseModel

    from ..campaign.spec import CampaignSpec
    from .trajectory import TrajectorySpec

__all__ = [
    "BoundSpec",
    "CaseSpec",
    "DomainModels",
    "KnownSpec",
    "MeterSpec",
    "Quantity",
    "Settings",
    "SharedErrorSpec",
    "SigmaPart",
    "SigmaSpec",
    "StreamSpec",
]

Quantity = tuple[float, str]
"""A value and its unit."""


@dataclass(frozen=True)
class DomainModels:
    """The pydantic models by which a domain checks its parts of a case file.

    Attributes
    ----------
    options : type of pydantic model, or None
        For ``domains: {name: {...}}``; None means that the domain takes no options.
    stream, node : type of pydantic model, or None
        For extra keys of streams and nodes.
    needs_streams : bool
        Whether the domain has nothing to say without streams.
    version : str
        Of the domain.
    """

    options: type[BaseModel] | None
    stream: type[BaseModel] | None = None
    node: type[BaseModel] | None = None
    needs_streams: bool = True
    version: str = ""


@dataclass(frozen=True)
class StreamSpec:
    """A stream, its two ends (`reconcile.OUTSIDE` for the environment) and its checked extra keys."""

    name: str
    source: str
    target: str
    options: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class SigmaPart:
    """One component of a standard uncertainty.

    Attributes
    ----------
    kind : 'reading' or 'absolute'
    value : float
        Standard uncertainty (k = 1): a fraction of the value for ``reading``; for ``absolute`` in the unit of the
        meter. Above zero.
    text : str
        As the user wrote it.
    origin : str
        Key it came from: sigma, accuracy, expanded or resolution.
    """

    kind: Literal["reading", "absolute"]
    value: float
    text: str
    origin: str


@dataclass(frozen=True)
class SigmaSpec:
    """A standard uncertainty as the root sum of squares of independent components (GUM, 5.1.2).

    Attributes
    ----------
    components : tuple of SigmaPart
    marked_guess : bool
        Whether the user wrote it as ``default(...)``: accepted, but not known.
    """

    components: tuple[SigmaPart, ...]
    marked_guess: bool = False

    @property
    def relative(self) -> float:
        """Part that grows with the value, as a fraction of it."""
        return math.sqrt(sum(p.value**2 for p in self.components if p.kind == "reading"))

    @property
    def absolute(self) -> float:
        """Part that does not, in the unit of the meter."""
        return math.sqrt(sum(p.value**2 for p in self.components if p.kind == "absolute"))

    def at(self, value: float) -> float:
        """Total standard uncertainty at a value, in the unit of the meter."""
        return math.hypot(self.relative * value, self.absolute)


@dataclass(frozen=True)
class MeterSpec:
    """An instrument.

    Attributes
    ----------
    tag : str
        Also the name of its column in the readings.
    reads : tuple of (variable name, coefficient)
        The reading is the sum of coefficient times variable.
    unit : str
    sigma : SigmaSpec
    span : (float, float) or None
        Lower and upper end of its range, in its unit.
    options : mapping
        ``description``, ``fault_rate`` and ``reading`` where the user gave them; ``calibrated`` as datetimes.
    """

    tag: str
    reads: tuple[tuple[str, float], ...]
    unit: str
    sigma: SigmaSpec
    span: tuple[float, float] | None = None
    options: Mapping[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class KnownSpec:
    """A value that no instrument of the case reads: exact if `sigma` is None, prior knowledge otherwise."""

    variable: str
    value: float
    unit: str
    sigma: SigmaSpec | None = None


@dataclass(frozen=True)
class SharedErrorSpec:
    """One cause that moves several meters.

    Attributes
    ----------
    name : str
    sigma : tuple of SigmaSpec
        What the cause contributes to each meter, in the order of `meters` and in the unit of each.
    meters : tuple of str
    correlations : tuple of (tag, tag, float) or None
        None: the meters move fully together, all in the same direction. Otherwise pairs that were not named are
        uncorrelated; the matrix is positive definite.
    """

    name: str
    sigma: tuple[SigmaSpec, ...]
    meters: tuple[str, ...]
    correlations: tuple[tuple[str, str, float], ...] | None = None


@dataclass(frozen=True)
class BoundSpec:
    """Limits of a variable, each a value with its unit, or None."""

    lower: Quantity | None = None
    upper: Quantity | None = None


@dataclass(frozen=True)
class Settings:
    """How the case is to be judged; what stands under ``settings:``.

    Attributes
    ----------
    level : float
        Chance of a false alarm that the tests may take.
    power : float
        Chance of noticing a fault of the smallest detectable size.
    max_faults : int or None
        Most faults that an explanation may combine; None leaves it to the program.
    percent_at : 'adjusted' or 'reading'
        At which value a sigma in percent is evaluated.
    fault_rate, leak_rate : float
        Probability, before any reading, that a given meter is at fault and that a given node leaks. The values that
        stand here if the user says nothing are a choice of this program, no source.
    """

    level: float = 0.05
    power: float = 0.90
    max_faults: int | None = None
    percent_at: Literal["adjusted", "reading"] = "adjusted"
    fault_rate: float = 0.02
    leak_rate: float = 0.01


@dataclass(frozen=True)
class CaseSpec:
    """A whole case.

    Attributes
    ----------
    title : str
    path : pathlib.Path
        The case file; names of other files in it are relative to its folder.
    domains : dict of str to dict
        The user's options of each domain as plain data; they have passed the domain's model.
    nodes : dict of str to dict
        All nodes, in the order in which streams name them, with their checked options.
    streams, meters, known, shared_errors, bounds, design, figures : dict
        In the order of the file.
    readings : str, dict or None
        Where the readings are, as the user wrote it.
    settings : Settings
    where : callable
        ``where(path) -> Location``, e.g. of ``("meters", "FT-1", "sigma")``.
    campaign : CampaignSpec or None
        How the log becomes snapshots; None where the file was not read that far.
    trajectory : TrajectorySpec or None
        How windows are tied by inventories, where they are.
    """

    title: str
    path: Path
    domains: dict[str, Any]
    nodes: dict[str, dict[str, Any]]
    streams: dict[str, StreamSpec]
    meters: dict[str, MeterSpec]
    known: dict[str, KnownSpec]
    shared_errors: dict[str, SharedErrorSpec]
    bounds: dict[str, BoundSpec]
    design: dict[str, Quantity]
    figures: dict[str, str]
    readings: str | dict[str, Any] | None
    settings: Settings
    where: Callable[..., Location]
    campaign: CampaignSpec | None = None
    trajectory: TrajectorySpec | None = None

    def beside(self, name: str) -> str:
        """Where a file that the case names is: beside the case; the URL of a database stays as it is."""
        return name if "://" in name else str(self.path.parent / name)
