"""Density of a slurry from its solids, and back: volumes of solids and liquid add."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

__all__ = ["pulp_density", "pulp_density_slopes", "solids_fraction"]

Array = npt.NDArray[np.float64]


def pulp_density(solids: npt.ArrayLike, solids_density: npt.ArrayLike, liquid_density: npt.ArrayLike) -> Array:
    """Density of a slurry, ``1/rho = w/rho_s + (1 - w)/rho_l``.

    Parameters
    ----------
    solids : array_like
        Mass fraction w of dry solids, 0 to 1.
    solids_density, liquid_density : array_like
        In any one unit of mass per volume.

    Returns
    -------
    ndarray
        In the same unit.

    Notes
    -----
    Holds where volumes add: no entrained air, nothing dissolving.
    """
    w = np.asarray(solids, dtype=float)
    return np.asarray(1.0 / (w / np.asarray(solids_density, float) + (1.0 - w) / np.asarray(liquid_density, float)))


def solids_fraction(density: npt.ArrayLike, solids_density: npt.ArrayLike, liquid_density: npt.ArrayLike) -> Array:
    """Mass fraction of solids from the density of a slurry, ``w = rho_s (rho - rho_l) / (rho (rho_s - rho_l))``.

    Parameters
    ----------
    density, solids_density, liquid_density : array_like
        In any one unit of mass per volume.

    Returns
    -------
    ndarray

    Raises
    ------
    ValueError
        If solids and liquid are equally dense: the density then says nothing of the solids.
    """
    rho, rho_s = np.asarray(density, float), np.asarray(solids_density, float)
    rho_l = np.asarray(liquid_density, float)
    if np.any(rho_s == rho_l):
        raise ValueError("solids and liquid are equally dense, so a density does not tell the solids fraction")
    return np.asarray(rho_s * (rho - rho_l) / (rho * (rho_s - rho_l)))


def pulp_density_slopes(solids: Array, solids_density: Array, liquid_density: float) -> tuple[Any, Any]:
    """Derivatives of `pulp_density` by the solids fraction and by the solids density."""
    rho = pulp_density(solids, solids_density, liquid_density)
    return -(rho**2) * (1.0 / solids_density - 1.0 / liquid_density), rho**2 * solids / solids_density**2
