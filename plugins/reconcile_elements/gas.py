"""Gas volumes and fractions: reference conditions, moisture, and flow from a gas that does not react.

Every conversion states its reference: "standard" and "normal" mean different things in different trades, and the
choice alone moves a number by up to 8 %. The ideal-gas law is used; for air at ambient conditions it is good to
0.1 %.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from reconcile import did_you_mean

from .refusal import Mistake, Refusal

__all__ = [
    "CONDITIONS",
    "GAS_CONSTANT",
    "KPA_PER_MMHG",
    "Conditions",
    "InertBalance",
    "btps_to_stpd",
    "conditions",
    "dry_fraction",
    "inert_balance",
    "molar_flow",
    "molar_volume",
    "saturation_pressure",
    "volume_factor",
    "wet_fraction",
]

GAS_CONSTANT = 8.31446261815324
"""J/(mol K); exact since the SI of 2019."""

KPA_PER_MMHG = 101.325 / 760
"""Conventional: 760 mmHg to one standard atmosphere (NIST SP 811, to 2e-7)."""

_ZERO = 273.15

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Conditions:
    """What a gas volume refers to.

    Attributes
    ----------
    celsius, kpa : float
        Temperature in deg C and absolute pressure in kPa.
    text : str
        How to print it.
    """

    celsius: float
    kpa: float
    text: str


CONDITIONS = {
    "0 C, 101.325 kPa": Conditions(0.0, 101.325, "0 C, 101.325 kPa"),
    "0 C, 100 kPa": Conditions(0.0, 100.0, "0 C, 100 kPa"),
    "15 C, 101.325 kPa": Conditions(15.0, 101.325, "15 C, 101.325 kPa"),
    "20 C, 101.325 kPa": Conditions(20.0, 101.325, "20 C, 101.325 kPa"),
    "25 C, 101.325 kPa": Conditions(25.0, 101.325, "25 C, 101.325 kPa"),
    "25 C, 100 kPa": Conditions(25.0, 100.0, "25 C, 100 kPa"),
}
"""Reference conditions in use. 0 C, 101.325 kPa: DIN 1343 normal state, STPD. 0 C, 100 kPa: IUPAC STP since 1982.
15 C, 101.325 kPa: ISO 13443. 20 C and 25 C: instrument makers (common practice, no source)."""


def conditions(text: str) -> Conditions:
    """Return the reference conditions of this name, e.g. ``"0 C, 101.325 kPa"``.

    Raises
    ------
    Refusal
        ``gas-reference`` for names such as "standard", which do not say which standard.
    """
    if text in CONDITIONS:
        return CONDITIONS[text]
    known = "; ".join(CONDITIONS)
    hint = did_you_mean(text, CONDITIONS)
    raise Refusal(
        Mistake(
            "gas-reference",
            f"{text!r} does not state a temperature and a pressure that is known here",
            f"{hint} known: {known}".strip(),
        )
    )


def molar_volume(reference: Conditions) -> float:
    """Return the volume of one mol of ideal gas in L/mol (22.414 at 0 C, 101.325 kPa)."""
    return GAS_CONSTANT * (reference.celsius + _ZERO) / reference.kpa


def molar_flow(volume_flow: npt.ArrayLike, reference: Conditions) -> Floats:
    """Return mol per time for litres per time at the stated conditions, dry or wet as the volume is."""
    return np.asarray(volume_flow, dtype=np.float64) / molar_volume(reference)


def volume_factor(
    reference: Conditions, target: Conditions, *, water_kpa: float = 0.0, target_water_kpa: float = 0.0
) -> float:
    """Return the factor from a volume at one condition to the same gas at another.

    The dry part of the gas is what stays: its partial pressure is the total less that of water.

    Parameters
    ----------
    reference, target : Conditions
        From and to; total pressures.
    water_kpa, target_water_kpa : float
        Partial pressure of water vapour before and after, in kPa; 0 for dry gas.

    Returns
    -------
    float
        Volume at target = factor * volume at reference.
    """
    before, after = reference.kpa - water_kpa, target.kpa - target_water_kpa
    if min(before, after) <= 0:
        raise Refusal(
            Mistake(
                "gas-all-water",
                "the water vapour pressure reaches the total pressure: no dry gas is left",
                "check temperature and pressure; pressures are absolute",
            )
        )
    return (target.celsius + _ZERO) / (reference.celsius + _ZERO) * before / after


def btps_to_stpd(celsius: float = 37.0, kpa: float = 101.325, water_kpa: float | None = None) -> float:
    """Return the factor from a saturated gas at body temperature to standard dry gas (0 C, 101.325 kPa).

    Parameters
    ----------
    celsius : float
        Gas temperature in deg C.
    kpa : float
        Barometric pressure in kPa.
    water_kpa : float, optional
        Vapour pressure in kPa; default: saturation at `celsius`.
    """
    water = saturation_pressure(celsius) if water_kpa is None else water_kpa
    return volume_factor(Conditions(celsius, kpa, ""), CONDITIONS["0 C, 101.325 kPa"], water_kpa=water)


# IAPWS Industrial Formulation 1997, region 4, table 34 (coefficients from memory; its check values are tested).
_IF97 = (
    0.11670521452767e4,
    -0.72421316703206e6,
    -0.17073846940092e2,
    0.12020824702470e5,
    -0.32325550322333e7,
    0.14915108613530e2,
    -0.48232657361591e4,
    0.40511340542057e6,
    -0.23855557567849,
    0.65017534844798e3,
)


def saturation_pressure(celsius: float) -> float:
    """Return the vapour pressure of water in kPa over liquid, 0 to 373 deg C.

    Source: IAPWS-IF97, equation 30.

    Raises
    ------
    Refusal
        ``gas-temperature`` outside that range.
    """
    if not 0.0 <= celsius <= 373.946:
        raise Refusal(
            Mistake(
                "gas-temperature",
                f"{celsius:g} deg C is outside 0 to 373.946 deg C, where liquid water has a vapour pressure",
                "check the temperature and its unit",
            )
        )
    kelvin = celsius + _ZERO
    n1, n2, n3, n4, n5, n6, n7, n8, n9, n10 = _IF97
    theta = kelvin + n9 / (kelvin - n10)
    a = theta * theta + n1 * theta + n2
    b = n3 * theta * theta + n4 * theta + n5
    c = n6 * theta * theta + n7 * theta + n8
    return float(1e3 * (2 * c / (-b + np.sqrt(b * b - 4 * a * c))) ** 4)


def dry_fraction(wet: npt.ArrayLike, water: npt.ArrayLike) -> Floats:
    """Return mole fractions of the dry gas from those of the wet gas and its water fraction."""
    return np.asarray(wet, dtype=np.float64) / (1.0 - np.asarray(water, dtype=np.float64))


def wet_fraction(dry: npt.ArrayLike, water: npt.ArrayLike) -> Floats:
    """Return mole fractions of the wet gas from those of the dry gas and its water fraction."""
    return np.asarray(dry, dtype=np.float64) * (1.0 - np.asarray(water, dtype=np.float64))


class InertBalance(NamedTuple):
    """Result of an inert balance; all in the unit of the flow that was given.

    Attributes
    ----------
    inflow, outflow : ndarray
        Gas in and out.
    oxygen_uptake, carbon_dioxide_output : ndarray
        What the process took and made.
    """

    inflow: Floats
    outflow: Floats
    oxygen_uptake: Floats
    carbon_dioxide_output: Floats


def inert_balance(
    *,
    oxygen_in: npt.ArrayLike,
    carbon_dioxide_in: npt.ArrayLike,
    oxygen_out: npt.ArrayLike,
    carbon_dioxide_out: npt.ArrayLike,
    inflow: npt.ArrayLike | None = None,
    outflow: npt.ArrayLike | None = None,
    water_in: npt.ArrayLike = 0.0,
    water_out: npt.ArrayLike = 0.0,
) -> InertBalance:
    """Find the unmeasured gas flow from what does not react (N2 and Ar), then uptake and output.

    Also known as the Haldane transformation. Inert in = inert out, with inert = 1 - O2 - CO2 - H2O.

    Parameters
    ----------
    oxygen_in, carbon_dioxide_in, oxygen_out, carbon_dioxide_out : array_like
        Mole (or volume) fractions, 0 to 1, on the same basis as the flow: dry with the default water fractions
        of 0, wet otherwise.
    inflow, outflow : array_like
        Exactly one of them, in amount or reference volume per time.
    water_in, water_out : array_like
        Mole fractions of water in the two gases.

    Returns
    -------
    InertBalance

    Raises
    ------
    Refusal
        ``gas-flow`` unless exactly one flow is given; ``gas-fractions`` if fractions leave no inert gas (percent
        given as fraction, for instance).
    """
    if (inflow is None) == (outflow is None):
        raise Refusal(
            Mistake("gas-flow", "an inert balance needs exactly one of inflow and outflow", "give one of them")
        )
    o_in, c_in, o_out, c_out, w_in, w_out = (
        np.asarray(v, dtype=np.float64)
        for v in (oxygen_in, carbon_dioxide_in, oxygen_out, carbon_dioxide_out, water_in, water_out)
    )
    inert_in, inert_out = 1.0 - o_in - c_in - w_in, 1.0 - o_out - c_out - w_out
    if np.any(inert_in <= 0) or np.any(inert_out <= 0):
        raise Refusal(
            Mistake(
                "gas-fractions",
                "the fractions leave no inert gas",
                "write fractions between 0 and 1; 20.95 % is 0.2095",
            )
        )
    if inflow is None:
        out = np.asarray(outflow, dtype=np.float64)
        into = out * inert_out / inert_in
    else:
        into = np.asarray(inflow, dtype=np.float64)
        out = into * inert_in / inert_out
    return InertBalance(into, out, into * o_in - out * o_out, out * c_out - into * c_in)
