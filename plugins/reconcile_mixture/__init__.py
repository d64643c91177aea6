"""Domain `mixture`: components, assays and slurries carried by the streams of a network."""

from __future__ import annotations

from reconcile import Domain, hookimpl

from .domain import Mixture
from .slurry import pulp_density, solids_fraction

__all__ = ["Mixture", "pulp_density", "solids_fraction"]


@hookimpl
def reconcile_domains() -> list[type[Domain]]:
    """Offer the domain to case files."""
    return [Mixture]
