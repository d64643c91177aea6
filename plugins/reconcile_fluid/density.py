"""Densities that streams state."""

from __future__ import annotations

from reconcile import units

__all__ = ["density_of"]


def density_of(stream: str, text: str) -> float:
    """Density in kg/m3 from text such as ``1.02 kg/L``."""
    try:
        value, unit = units.parse_quantity(text)
        factor, _ = units.factor_offset(unit, "kg/m3")
    except ValueError as error:
        raise ValueError(
            f"density {text!r} of stream {stream!r} is not understood ({error}); write e.g. 1.02 kg/L"
        ) from None
    if not value > 0:
        raise ValueError(f"density {text!r} of stream {stream!r} must be above zero")
    return value * factor
