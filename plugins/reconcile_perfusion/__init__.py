"""Domain `perfusion`: solutes and oxygen in organ, dialysis and bioreactor circuits."""

from __future__ import annotations

from reconcile import Domain, hookimpl

from .domain import Perfusion

__all__ = ["Perfusion"]


@hookimpl
def reconcile_domains() -> list[type[Domain]]:
    """Offer the domain to case files."""
    return [Perfusion]
