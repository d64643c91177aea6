"""What a stream must state before a variable of its gas is there."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from reconcile import Network

from .options import ElementsOptions

__all__ = ["missing_variable"]

_BASIS = "write gas: dry (water taken out before the analyser) or gas: wet. At 30 C the two differ by 4 %"


def missing_variable(name: str, network: Network, options: ElementsOptions) -> str | None:
    """Sentence for a variable of a gas that no stream declared; None where it is no matter of gas.

    Parameters
    ----------
    name : str
        E.g. ``offgas.oxygen.fraction``, ``offgas.total``, ``offgas.volume_flow``.
    network : Network
    options : ElementsOptions
    """
    stream, _, quantity = name.partition(".")
    if stream not in network.streams:
        return None
    said: Mapping[str, Any] = network.stream_options.get(stream, {})
    composition, gas = said.get("composition"), said.get("gas")
    held = said.get("species") or composition or stream
    species = [held] if isinstance(held, str) else list(held)
    of, _, kind = quantity.rpartition(".")
    if kind == "fraction" and of in options.species:
        if of not in species:
            return f"stream {stream!r} does not hold {of}: it holds {', '.join(species)}"
        if composition:
            return f"the composition of stream {stream!r} is stated; leave composition out if {of} is read"
        if gas is None:
            return f"{of} is a fraction of the gas in stream {stream!r}: of wet or of dry gas? {_capital(_BASIS)}"
        return f"stream {stream!r} is a dry gas, which holds no {of}" if gas == "dry" else None
    if quantity not in ("total", "volume_flow"):
        return None
    if gas is None and not composition and len(species) > 1:
        words = f"stream {stream!r} does not say whether it is wet or dry gas: {_BASIS}"
        if quantity == "volume_flow" and not said.get("volume_at"):
            words += ". State the conditions of its volume as well, e.g. volume_at: 0 C, 101.325 kPa"
        return words
    if quantity == "volume_flow" and not said.get("volume_at"):
        return (
            f"stream {stream!r} does not say at which conditions its volume is stated, standard or those of the line: "
            "write e.g. volume_at: 0 C, 101.325 kPa"
        )
    return None


def _capital(words: str) -> str:
    return words[0].upper() + words[1:]
