"""Domain `energy`: heat carried by streams, exchanged, supplied and lost at nodes."""

from __future__ import annotations

from typing import TYPE_CHECKING

from reconcile import Domain, Section, hookimpl

from .domain import Energy
from .sensors import SwappedPair, swapped_pairs

if TYPE_CHECKING:
    from reconcile import Result

__all__ = ["Energy", "SwappedPair", "swapped_pairs"]


@hookimpl
def reconcile_domains() -> list[type[Domain]]:
    """Offer the domain to case files."""
    return [Energy]


@hookimpl
def reconcile_sections(result: Result) -> list[Section]:
    """Say where heat flows the wrong way, which two swapped sensors would explain before any statistics."""
    from .sensors import section

    return section(result)
