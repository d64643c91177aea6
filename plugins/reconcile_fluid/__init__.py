"""Domain `fluid`: what flows into a node flows out of it."""

from __future__ import annotations

from reconcile import Domain, hookimpl

from .domain import Fluid

__all__ = ["Fluid"]


@hookimpl
def reconcile_domains() -> list[type[Domain]]:
    """Offer the domain to case files."""
    return [Fluid]
