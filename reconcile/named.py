"""Names and units that every kind of answer takes from its model."""

from __future__ import annotations

from functools import cached_property
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from .model import Model

__all__ = ["Named"]


class Named:
    """What answers with a `model` have in common."""

    model: Model

    @cached_property
    def tags(self) -> tuple[str, ...]:
        """Tags of the meters, in the order of the case."""
        return tuple(self.model.readings[i].tag for i in self.model.meters)

    @cached_property
    def variables(self) -> tuple[str, ...]:
        """Names of the variables, possible faults left out; inventories are among them."""
        return tuple(self.model.names[c] for c in self.model.shown)

    @cached_property
    def units(self) -> tuple[str, ...]:
        """Unit of each variable."""
        return tuple(self.model.units[c] for c in self.model.shown)
