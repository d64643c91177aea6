"""Pressures at nodes and resistances of streams."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from reconcile import OUTSIDE, Expression, Network, System, units

from .density import density_of
from .options import FluidOptions

Array = npt.NDArray[np.float64]

STANDARD_GRAVITY = 9.80665
"""m/s2, exact by convention (3rd CGPM, 1901)."""

LAMINAR_LIMIT = 2000.0
"""Reynolds number below which a pipe flow is laminar; common practice, no source."""


def write_pressures(network: Network, system: System, flow: Expression, options: FluidOptions) -> None:
    """Write ``p_from - p_to = R q (+ static head)`` for every stream with a resistance.

    With pressures at the nodes as variables the loop rules of a network hold by themselves, so none are written.
    """
    kinds = network.of_streams("resistance")
    chosen = [i for i, k in enumerate(kinds) if k is not None]
    rises = [s for s, r, k in zip(network.streams, network.of_streams("rise"), kinds, strict=True) if r and k is None]
    if rises:
        raise ValueError(f"stream {rises[0]!r} has a rise but no resistance; write resistance: laminar")
    if not chosen:
        return
    ends = [(network.node_name(int(network.source[i])), network.node_name(int(network.target[i]))) for i in chosen]
    nodes = list(dict.fromkeys(n for pair in ends for n in pair))
    pressure = system.variables("pressure", nodes, unit=options.pressure_unit)
    if OUTSIDE in nodes:
        system.fix(pressure[[OUTSIDE]], _pressure(options.ambient_pressure, options.pressure_unit))
    _write_drops(network, system, flow, options, chosen, ends, pressure)


def _write_drops(
    network: Network,
    system: System,
    flow: Expression,
    options: FluidOptions,
    chosen: list[int],
    ends: list[tuple[str, str]],
    pressure: Expression,
) -> None:
    rises, densities = network.of_streams("rise"), network.of_streams("density")
    for kind in ("laminar", "turbulent"):
        pick = [j for j, i in enumerate(chosen) if network.of_streams("resistance")[i] == kind]
        if not pick:
            continue
        names = [network.streams[chosen[j]] for j in pick]
        per_flow = options.unit if kind == "laminar" else f"(({options.unit})*({options.unit}))"
        resistance = system.variables("resistance", names, unit=f"{options.pressure_unit}/({per_flow})", lower=0)
        drop = pressure[[ends[j][0] for j in pick]] - pressure[[ends[j][1] for j in pick]]
        head = np.array([_head(names[k], rises[chosen[j]], densities[chosen[j]], options) for k, j in enumerate(pick)])
        if kind == "laminar":
            loss = resistance * flow[names]
        else:
            loss = system.apply(
                _turbulent,
                resistance,
                flow[names],
                derivatives=_turbulent_slopes,
            )
        # Across a closed valve any pressure may stand, so a stream that is closed off has no pressure drop.
        open_ = [k for k, j in enumerate(pick) if not network.of_streams("closed", False)[chosen[j]]]
        system.require(
            (drop - loss - head)[open_] == 0,
            names=[f"{names[k]} pressure drop" for k in open_],
            kind="pressure",
            unit=options.pressure_unit,
            nodes=[names[k] for k in open_],
        )


def _turbulent(resistance: Array, flow: Array) -> Array:
    return resistance * flow * np.abs(flow)


def _turbulent_slopes(resistance: Array, flow: Array) -> tuple[Array, Array]:
    return flow * np.abs(flow), 2.0 * resistance * np.abs(flow)


def _pressure(text: str, unit: str) -> float:
    try:
        value, stated = units.parse_quantity(text)
        factor, offset = units.factor_offset(stated, unit)
    except ValueError as error:
        raise ValueError(f"ambient_pressure {text!r} is not understood ({error}); write e.g. 0 {unit}") from None
    return factor * value + offset


def _head(stream: str, rise: str | None, density: str | None, options: FluidOptions) -> float:
    """Static head of a stream that rises, in the unit of pressures."""
    if rise is None:
        return 0.0
    if density is None:
        raise ValueError(f"stream {stream!r} rises by {rise}, so its density is needed for the static head")
    try:
        value, stated = units.parse_quantity(rise)
        metres = value * units.difference_factor(stated, "m")
    except ValueError as error:
        raise ValueError(f"rise {rise!r} of stream {stream!r} is not understood ({error}); write e.g. 0.4 m") from None
    pascal = density_of(stream, density) * STANDARD_GRAVITY * metres
    return pascal * units.difference_factor("Pa", options.pressure_unit)


def laminar_resistance(length: float, diameter: float, viscosity: float) -> float:
    """Resistance of a round pipe to laminar flow: Hagen-Poiseuille, ``128 mu L / (pi D^4)``.

    Parameters
    ----------
    length, diameter : float
        In m.
    viscosity : float
        Dynamic viscosity in Pa s.

    Returns
    -------
    float
        In Pa s/m3. A relative error of the diameter counts four times.
    """
    return 128.0 * viscosity * length / (math.pi * diameter**4)


def reynolds(flow: float, diameter: float, density: float, viscosity: float) -> float:
    """Reynolds number of a round pipe; above `LAMINAR_LIMIT` the laminar law does not hold.

    Parameters
    ----------
    flow : float
        In m3/s.
    diameter : float
        In m.
    density : float
        In kg/m3.
    viscosity : float
        In Pa s.
    """
    return 4.0 * flow * density / (math.pi * diameter * viscosity)
