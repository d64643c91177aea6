"""Domain `elements`: atoms and charge are conserved, whatever reacts."""

from __future__ import annotations

from reconcile import Domain, hookimpl

from .domain import Elements

__all__ = ["Elements"]


@hookimpl
def reconcile_domains() -> list[type[Domain]]:
    """Offer the domain to case files."""
    return [Elements]
