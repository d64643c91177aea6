"""Specific enthalpy of water and steam with its derivatives, by the industrial formulation IAPWS-IF97.

The formulation is computed by the library ``iapws``, loaded when the first stream asks for it. Temperatures in degC,
pressures absolute in bar, enthalpies in kJ/kg with their zero at the triple point of the liquid.
"""

from __future__ import annotations

from collections.abc import Callable
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from reconcile import MissingExtra

__all__ = [
    "boiling_point",
    "boiling_point_slope",
    "saturated",
    "saturated_slopes",
    "steam",
    "steam_slopes",
    "tables",
    "water",
    "water_slopes",
]

Array = npt.NDArray[np.float64]

KELVIN = 273.15
_BAR = 0.1
"""MPa per bar."""
_LIQUID = (273.15, 623.15)
_VAPOUR = (273.15, 1073.15)
_SATURATION = (0.00611213 * _BAR, 220.64 * _BAR)
"""MPa: triple point to critical point; IAPWS-IF97 states its saturation line from 273.15 K (611.213 Pa) on."""


@lru_cache(maxsize=1)
def tables() -> Any:
    """Return the library's module of the formulation.

    Raises
    ------
    MissingExtra
        If the library is not installed.
    """
    try:
        from iapws import iapws97
    except ImportError as error:
        raise MissingExtra("iapws", "steam", "the enthalpy of water and steam") from error
    return iapws97


def _each(state: Callable[[float, float], tuple[float, ...]], count: int, a: Array, b: Array) -> tuple[Array, ...]:
    """Call a function of two numbers entry by entry; nan outside its range."""
    a, b = np.broadcast_arrays(np.atleast_1d(a), np.atleast_1d(b))
    out = np.full((count, a.size), np.nan)
    for i, (one, other) in enumerate(zip(a.tolist(), b.tolist(), strict=True)):
        out[:, i] = state(one, other)
    return tuple(out)


_REMEMBERED = 4096
"""States kept: iterations ask for the enthalpy and its slopes at the same temperatures and pressures again and again."""


@lru_cache(maxsize=2)
def _region(number: int, limits: tuple[float, float]) -> Callable[[float, float], tuple[float, ...]]:
    formula = getattr(tables(), f"_Region{number}")

    @lru_cache(maxsize=_REMEMBERED)
    def state(temperature: float, pressure: float) -> tuple[float, ...]:
        kelvin, mpa = temperature + KELVIN, pressure * _BAR
        if not (limits[0] <= kelvin <= limits[1] and 0.0 < mpa <= 100.0):
            return np.nan, np.nan, np.nan
        s = formula(kelvin, mpa)
        # dh/dT at constant p is cp; dh/dp at constant T is v (1 - T alpha), here per bar
        return float(s["h"]), float(s["cp"]), float(s["v"] * (1.0 - kelvin * s["alfav"])) * 100.0

    return state


def water(temperature: Array, pressure: Array) -> Array:
    """Specific enthalpy of liquid water (region 1), kJ/kg.

    Parameters
    ----------
    temperature, pressure : ndarray, shape (k,)
        degC, 0 to 350; bar absolute. A little above the boiling point the formula still describes the liquid.

    Returns
    -------
    ndarray, shape (k,)
        nan outside the range of the formula.
    """
    return _each(_region(1, _LIQUID), 3, temperature, pressure)[0]


def water_slopes(temperature: Array, pressure: Array) -> tuple[Array, Array]:
    """Derivatives of `water` by temperature, kJ/(kg K), and pressure, kJ/(kg bar)."""
    _, by_t, by_p = _each(_region(1, _LIQUID), 3, temperature, pressure)
    return by_t, by_p


def steam(temperature: Array, pressure: Array) -> Array:
    """Specific enthalpy of superheated steam (region 2), kJ/kg; as `water`, 0 to 800 degC."""
    return _each(_region(2, _VAPOUR), 3, temperature, pressure)[0]


def steam_slopes(temperature: Array, pressure: Array) -> tuple[Array, Array]:
    """Derivatives of `steam` by temperature and pressure."""
    _, by_t, by_p = _each(_region(2, _VAPOUR), 3, temperature, pressure)
    return by_t, by_p


@lru_cache(maxsize=_REMEMBERED)
def _both_phases(mpa: float) -> tuple[float, float]:
    """Specific enthalpies of boiling water and of dry steam on the saturation line."""
    liquid, vapour = (float(tables()._Region4(mpa, x)["h"]) for x in (0, 1))
    return liquid, vapour


def _two_phases(pressure: float, quality: float) -> tuple[float, ...]:
    mpa = pressure * _BAR
    if not _SATURATION[0] <= mpa <= _SATURATION[1]:
        return np.nan, np.nan
    liquid, vapour = _both_phases(mpa)
    return liquid + quality * (vapour - liquid), vapour - liquid


def saturated(pressure: Array, quality: Array) -> Array:
    """Specific enthalpy of saturated water and steam, kJ/kg.

    Parameters
    ----------
    pressure, quality : ndarray, shape (k,)
        bar absolute, and mass fraction of vapour.

    Returns
    -------
    ndarray, shape (k,)
    """
    return _each(_two_phases, 2, pressure, quality)[0]


def saturated_slopes(pressure: Array, quality: Array) -> tuple[Array, Array]:
    """Derivatives of `saturated` by pressure (central difference along the saturation line) and by quality."""
    return _central(lambda p: saturated(p, quality), pressure), _each(_two_phases, 2, pressure, quality)[1]


def boiling_point(pressure: Array) -> Array:
    """Boiling point of water, degC, at a pressure in bar absolute; nan outside the saturation line."""
    values = np.atleast_1d(np.asarray(pressure, dtype=float)) * _BAR
    inside = (values >= _SATURATION[0]) & (values <= _SATURATION[1])
    return np.array(
        [float(tables()._TSat_P(v)) - KELVIN if ok else np.nan for v, ok in zip(values, inside, strict=True)]
    )


def boiling_point_slope(pressure: Array) -> tuple[Array]:
    """Derivative of `boiling_point`, K/bar."""
    return (_central(boiling_point, pressure),)


def _central(function: Callable[[Array], Array], at: Array) -> Array:
    step = 1e-5 * np.asarray(at, dtype=float)
    return (function(at + step) - function(at - step)) / (2.0 * step)
