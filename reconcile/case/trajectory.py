"""What stands under ``trajectory:``: nodes whose inventory ties one window to the next."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

from ..errors import Problems, did_you_mean
from ..units import UnitProblem, describe_kind, difference_factor
from .places import Places
from .quantities import Refusal, read_quantity, read_unit
from .reads import unquoted
from .sigma import read_sigma
from .spec import KnownSpec, MeterSpec, Quantity, SharedErrorSpec
from .validate import validated

if TYPE_CHECKING:
    from ..campaign.spec import CampaignSpec

__all__ = [
    "InventorySpec",
    "TrajectoryModel",
    "TrajectorySpec",
    "change_factor",
    "check_log",
    "check_rates",
    "read_trajectory",
]

FROM_STAMPS = "from stamps"


class InventoryModel(BaseModel):
    """An inventory in long form."""

    model_config = ConfigDict(extra="forbid", coerce_numbers_to_str=True)
    unit: Any = Field(None, description="Unit of the inventory, e.g. kg", json_schema_extra={"type": "string"})
    rate: str | None = Field(None, description="Variable that is its rate of change; node.accumulation when left out")


class TrajectoryModel(BaseModel):
    """Windows that follow one another, tied by what nodes hold."""

    model_config = ConfigDict(extra="forbid", coerce_numbers_to_str=True)
    inventories: dict[str, Any] = Field(
        description="Node: unit of what it holds; adds the variable node.inventory. Or {unit: kg, rate: variable}",
        min_length=1,
    )
    read_at: Literal["start", "end"] = Field(description="Whether inventories are read at the start or end of a window")
    step: str = Field(
        FROM_STAMPS, description="Length of every window, e.g. 10 min, or 'from stamps' to take it from the time column"
    )
    constant_errors: dict[str, Any] | None = Field(
        None,
        description="Part of a meter's error that stays the same in all windows, beside its sigma: FT-1: 0.5 % of reading",
    )
    varying: list[str] = Field(
        [], description="Variables under known: whose value may differ from window to window; the others stay the same"
    )


@dataclass(frozen=True)
class InventorySpec:
    """An inventory: the name of its variable, its unit, and the variable that is its rate of change."""

    name: str
    unit: str
    rate: str


@dataclass(frozen=True)
class TrajectorySpec:
    """How windows are tied.

    Attributes
    ----------
    inventories : dict of str to InventorySpec
        By the key the user wrote.
    at_end : bool
        Whether inventories are read at the end of each window, else at its start.
    step : (float, str) or None
        Length of a window; None means from the stamps.
    constant_errors : tuple of SharedErrorSpec
        One for each meter with an error that stays.
    varying : tuple of str
        Variables under ``known:`` that are drawn anew in each window.
    """

    inventories: dict[str, InventorySpec]
    at_end: bool
    step: Quantity | None
    constant_errors: tuple[SharedErrorSpec, ...]
    varying: tuple[str, ...]

    def held(self, meters: Mapping[str, MeterSpec]) -> tuple[str, ...]:
        """Tags of the meters that read nothing but inventories: they tell of one instant."""
        names = {i.name for i in self.inventories.values()}
        return tuple(t for t, m in meters.items() if all(n in names for n, _ in m.reads))


def read_trajectory(
    value: Any,
    meters: Mapping[str, MeterSpec],
    all_tags: tuple[str, ...],
    known: Mapping[str, KnownSpec],
    places: Places,
    problems: Problems,
) -> TrajectorySpec | None:
    """Read the block ``trajectory:``.

    Parameters
    ----------
    value : plain data
    meters, known : mappings
        Those that were read without problems.
    all_tags : tuple of str
        All tags that the case names.
    places : Places
    problems : Problems

    Returns
    -------
    TrajectorySpec or None
        None where it was refused, or is not there.
    """
    if value is None:
        return None
    path = ("trajectory",)
    model = validated(TrajectoryModel, value, path=path, owner="trajectory", places=places, problems=problems)
    if model is None:
        return None
    before = len(problems.found)
    inventories = {}
    for key, entry in model.inventories.items():
        spot = (*path, "inventories", key)
        found = _inventory(unquoted(key), entry, spot, places, problems)
        if found is not None:
            inventories[key] = found
    step = None
    if model.step.strip() != FROM_STAMPS:
        try:
            step = read_quantity(model.step, "step of the trajectory", "10 min")
            seconds = step[0] * difference_factor(step[1], "s")
            if not seconds > 0:
                raise Refusal(
                    "step-not-positive", f"step of the trajectory is {model.step!r}", "write e.g. step: 10 min"
                )
        except (Refusal, UnitProblem) as refused:
            known_code = refused.code if isinstance(refused, Refusal) else "step-unreadable"
            words = (
                refused.message
                if isinstance(refused, Refusal)
                else f"step of the trajectory, {model.step!r}, is no time"
            )
            problems.add(
                known_code, words, "write e.g. step: 10 min, or step: from stamps", places.where((*path, "step"))
            )
    errors = []
    for tag, text in (model.constant_errors or {}).items():
        spot = (*path, "constant_errors", tag)
        if tag not in all_tags:
            hint = did_you_mean(tag, all_tags) or "name a tag that stands under meters:"
            problems.add("unknown-meter", f"there is no meter {tag!r}", hint, places.where(spot, key=True))
        elif tag in meters:
            meter = meters[tag]
            sigma = read_sigma(
                {"sigma": text}, unit=meter.unit, span=meter.span, owner=f"the constant error of {tag!r}", path=spot,
                places=places, problems=problems,
            )  # fmt: skip
            if sigma is not None:
                errors.append(SharedErrorSpec(f"constant part of {tag}", (sigma,), (tag,)))
    for i, name in enumerate(model.varying):
        if name not in known or known[name].sigma is None:
            hint = did_you_mean(name, known) or "name a variable that stands under known: with a sigma"
            problems.add("unknown-known", f"{name!r} is no prior knowledge of this case", hint,
                         places.where((*path, "varying", i)))  # fmt: skip
    if len(problems.found) > before:
        return None
    return TrajectorySpec(inventories, model.read_at == "end", step, tuple(errors), tuple(model.varying))


def _inventory(key: str, entry: Any, path: tuple[Any, ...], places: Places, problems: Problems) -> InventorySpec | None:
    block = entry if isinstance(entry, dict) else {"unit": entry}
    model = validated(InventoryModel, block, path=path, owner=f"inventory {key!r}", places=places, problems=problems)
    if model is None:
        return None
    try:
        unit = read_unit(block.get("unit"), f"inventory {key!r}")
    except Refusal as refused:
        problems.extend([refused.at(places.where(path))])
        return None
    name = key if "." in key else f"{key}.inventory"
    return InventorySpec(name, unit, model.rate or f"{key.split('.', 1)[0]}.accumulation")


def change_factor(inventory: InventorySpec, rate_unit: str) -> float:
    """Change of an inventory, in its unit, per second and unit of its rate.

    Raises
    ------
    UnitProblem
        If the rate is in no unit of the inventory per time.
    """
    return difference_factor(rate_unit, f"({inventory.unit})/s" if inventory.unit not in ("", "1") else "1/s")


def check_rates(spec: TrajectorySpec, variables: Mapping[str, str], where: Any, problems: Problems) -> None:
    """Check that the rate of each inventory is a variable of the case, in a unit that fits.

    Parameters
    ----------
    spec : TrajectorySpec
    variables : mapping of variable name to unit
        What the domains declared.
    where : callable
        ``where(path) -> Location``.
    problems : Problems
    """
    for key, inventory in spec.inventories.items():
        spot = ("trajectory", "inventories", key)
        node = key.split(".", 1)[0]
        if inventory.rate not in variables:
            problems.add(
                "no-rate",
                f"inventory {key!r}: there is no variable {inventory.rate!r} by which it changes",
                f"write nodes: {{{node}: {{stores: true}}}}"
                if inventory.rate == f"{node}.accumulation"
                else did_you_mean(inventory.rate, list(variables)) or "name a variable of a domain",
                where(spot),
            )
            continue
        if inventory.name in variables:
            problems.add("name-taken", f"a domain has a variable {inventory.name!r} already",
                         "write another name, e.g. tank.contents: {unit: kg, rate: tank.accumulation}", where(spot))  # fmt: skip
        unit = variables[inventory.rate]
        try:
            change_factor(inventory, unit)
        except UnitProblem:
            problems.add(
                "unit-mismatch",
                f"inventory {key!r} is in {inventory.unit} ({describe_kind(inventory.unit) or 'another kind'}), "
                f"but {inventory.rate} is in {unit}",
                "an inventory times 1/time must be of the kind of its rate, e.g. kg for kg/h",
                where(spot),
            )


def check_log(
    spec: TrajectorySpec, campaign: CampaignSpec | None, meters: Mapping[str, MeterSpec], where: Any, problems: Problems
) -> None:
    """Refuse what a log cannot mean where inventories tie its windows.

    Parameters
    ----------
    spec : TrajectorySpec
    campaign : CampaignSpec or None
        What the case says about its log.
    meters : mapping of tag to MeterSpec
    where : callable
        ``where(path, key=...) -> Location``.
    problems : Problems
    """
    if campaign is None:
        return
    names = {i.name: i for i in spec.inventories.values()}
    held = spec.held(meters)
    for tag, rule in campaign.readings.items():
        if tag not in meters:
            continue
        reads = [n for n, _ in meters[tag].reads]
        if rule.level is not None and tag not in held:
            node = reads[0].split(".", 1)[0]
            own = next((i for i in names.values() if i.rate in reads or i.name.split(".", 1)[0] == node), None)
            problems.add(
                "level-of-a-rate",
                f"meter {tag!r} turns a level into its change over a window, which uses every reading twice; windows tied "
                "by inventories take what is held at each border instead",
                f"write reads: {own.name}, with unit and sigma in {own.unit}"
                if own is not None
                else f"add {node} under trajectory: inventories, and write reads: {node}.inventory",
                where(("meters", tag, "reading", "level"), key=True),
            )
        for kind, given in (("counter", rule.counter is not None), ("sample", rule.sample)):
            if given and any(n in names for n in reads):
                problems.add(
                    f"inventory-{kind}",
                    f"meter {tag!r} reads an inventory, which is of one instant; a {kind} is of a whole window",
                    "read the inventory from a level, or from a column of what is held",
                    where(("meters", tag, "reading", kind), key=True),
                )
    for tag, meter in meters.items() if campaign.windows is not None else ():
        if tag not in held and any(n in names for n, _ in meter.reads):
            problems.add(
                "instant-and-mean",
                f"meter {tag!r} reads an inventory, which is of one instant, together with what is a mean over the window",
                "read the inventory alone",
                where(("meters", tag, "reads")),
            )
    if campaign.line_ups:
        problems.add(
            "line-up-tied",
            "line_ups close streams in some windows, but windows tied by inventories have one network throughout",
            "leave line_ups out, and keep the closed stream with a meter that reads its zero; or leave trajectory out",
            where(("line_ups",), key=True),
        )
    if campaign.lab is not None and campaign.windows is None:
        problems.add(
            "samples-tied",
            "samples of the laboratory pick moments of the log, but windows tied by inventories must cover all the time "
            "between them",
            "add windows:, e.g. windows: {length: 1 h}; each takes the mean of its samples",
            where(("lab",), key=True),
        )
