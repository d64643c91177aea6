"""Domain `charge`: currents, electroneutrality of solutions, Faraday's law."""

from __future__ import annotations

from reconcile import Domain, hookimpl

from .domain import Charge

__all__ = ["Charge"]


@hookimpl
def reconcile_domains() -> list[type[Domain]]:
    """Offer the domain to case files."""
    return [Charge]
