"""How numbers are shown: value and uncertainty to the same decimal, taken from the uncertainty."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from ..snapshot_lines import ReadingLine

__all__ = ["decimals", "plain", "reading_numbers", "signed", "with_sigma"]


def decimals(sigma: float) -> int:
    """Decimals that show a standard uncertainty with two significant digits.

    Parameters
    ----------
    sigma : float
        Above zero; anything else gives a default of 4.
    """
    if not math.isfinite(sigma) or sigma <= 0:
        return 4
    return min(12, max(0, 1 - math.floor(math.log10(sigma) + 1e-12)))


def plain(value: float, sigma: float = math.nan, *, missing: str = "-") -> str:
    """Show a value with as many decimals as its uncertainty asks for."""
    if not math.isfinite(value):
        return missing
    if math.isfinite(sigma) and sigma > 0:
        if abs(value) >= 1e9 or sigma < 1e-9:
            return f"{value:.6g}"
        text = f"{value:.{decimals(sigma)}f}"
    else:
        text = f"{value:.6g}"
    return text[1:] if text.startswith("-") and float(text) == 0 else text


def signed(value: float, sigma: float = math.nan, *, missing: str = "-") -> str:
    """Show a value with its sign."""
    text = plain(value, sigma, missing=missing)
    return text if text == missing or text.startswith("-") else f"+{text}"


def with_sigma(value: float, sigma: float, unit: str = "") -> str:
    """Show ``value +/- sigma unit``, the sign written as ±."""
    text = f"{plain(value, sigma)} ± {plain(sigma, sigma)}" if math.isfinite(sigma) else plain(value)
    return f"{text} {unit}".rstrip()


def reading_numbers(r: ReadingLine) -> tuple[str, str, str, str, str, str]:
    """Numbers of a reading as every table shows them: read, adjusted, sigma before and after, moved, moved in sigmas."""
    sigma = min((x for x in (r.sigma_before, r.sigma) if math.isfinite(x) and x > 0), default=math.nan)
    return (
        plain(r.reading, sigma),
        plain(r.adjusted, sigma),
        plain(r.sigma_before, r.sigma_before),
        plain(r.sigma, r.sigma),
        signed(r.adjustment, sigma),
        signed(r.in_sigmas, 0.1),
    )
