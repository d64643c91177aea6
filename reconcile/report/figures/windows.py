"""Windows that are tied by what nodes hold: inventories, readings and evidence over their sequence."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from ...diagnose.critical import chi2_limit
from ...results import word_of_evidence
from ..trajectory import meters_of_inventories
from .evidence import evidence_over
from .series import MOST_FIGURES, PANELS, time_series
from .sheet import Figure

if TYPE_CHECKING:
    from ...trajectory import Trajectory

__all__ = ["derived_over_windows", "evidence_of_windows", "inventories", "readings_over_windows"]

Array = npt.NDArray[np.float64]
_Panel = tuple[str, str, Array, Array, Array]


def inventories(found: Trajectory) -> list[Figure]:
    """Draw what nodes hold over the windows: as read, adjusted, and the band of two sigmas.

    Parameters
    ----------
    found : Trajectory

    Returns
    -------
    list of Figure
        Six inventories a figure; empty for one window.
    """
    read_by = meters_of_inventories(found)
    at = "end" if found.trajectory.at_end else "start"
    panels, own = [], {}
    for inventory in found.trajectory.inventories.values():
        name = inventory.name
        value, sigma = found.inventory(name)
        raw = np.full(found.size, np.nan)
        if name in read_by:
            _, i = read_by[name]
            raw = found.base[:, i]
            own[name] = _stand_out(found, i)
        panels.append((name, inventory.unit, raw, value, sigma))
    return _drawn(found, panels, own, "inventories", f"Inventories at the {at} of each window")


def readings_over_windows(found: Trajectory) -> list[Figure]:
    """Draw the meters that read no inventory, those first whose readings stand out most; no more than twelve.

    Parameters
    ----------
    found : Trajectory

    Returns
    -------
    list of Figure
    """
    held = {j for j, _ in meters_of_inventories(found).values()}
    frame = found.to_frame()
    panels, own, worst = [], {}, {}
    for j, (tag, i) in enumerate(zip(found.tags, found.model.meters, strict=True)):
        if j in held or not np.isfinite(found.base[:, i]).any():
            continue
        rows = frame[frame["meter"] == tag]
        columns = [rows[c].to_numpy(dtype=float) for c in ("reading", "adjusted", "sigma")]
        panels.append((tag, found.model.readings[i].unit, *columns))
        own[tag] = _stand_out(found, int(i))
        worst[tag] = float(np.nanmax(np.abs(found.z[:, i]), initial=0.0))
    if len(panels) > PANELS * MOST_FIGURES:
        panels = sorted(panels, key=lambda p: -worst[p[0]])[: PANELS * MOST_FIGURES]
    return _drawn(found, panels, own, "readings", "Readings over the windows")


def derived_over_windows(found: Trajectory) -> list[Figure]:
    """Draw the derived values of the case over the windows.

    Parameters
    ----------
    found : Trajectory

    Returns
    -------
    list of Figure
        Empty where the case asks for none.
    """
    if not found.spec.figures:
        return []
    from ...export_trajectory import package_of_trajectory

    frame = package_of_trajectory(found).tables["figures"]
    panels = []
    for name in found.spec.figures:
        rows = frame[frame["figure"] == name]
        value, sigma = (rows[c].to_numpy(dtype=float) for c in ("value", "sigma"))
        panels.append((name, "", np.full(found.size, np.nan), value, sigma))
    return _drawn(found, panels, {}, "derived", "Derived values over the windows")


def evidence_of_windows(found: Trajectory) -> Figure | None:
    """Draw what the checks that each window completed add to χ², as a multiple of its limit.

    Parameters
    ----------
    found : Trajectory

    Returns
    -------
    Figure or None
        None for one window, or without checks.
    """
    objective, checks, p = found.by_window
    limit = np.array([chi2_limit(found.settings.level, int(c)) for c in checks])
    words = [word_of_evidence(int(c), float(v)) for c, v in zip(checks, p, strict=True)]
    return evidence_over(found.labels, objective, limit, words, noun="windows")


def _stand_out(found: Trajectory, reading: int) -> list[str]:
    """Letter of a flagged span in each window in which this reading's test value is beyond its limit."""
    with np.errstate(invalid="ignore"):
        return ["S" if beyond else "" for beyond in np.abs(found.z[:, reading]) > found.z_limit]


def _drawn(
    found: Trajectory, panels: Sequence[_Panel], own: dict[str, list[str]], name: str, title: str
) -> list[Figure]:
    if found.size < 2:
        return []
    out = []
    for k in range(0, len(panels), PANELS):
        part = panels[k : k + PANELS]
        number = "" if len(panels) <= PANELS else f"-{k // PANELS + 1}"
        marks = {tag: own[tag] for tag, *_ in part if tag in own}
        figure = time_series(
            found.labels, part, [""] * found.size, own=marks, name=name + number, title=title, noun="windows"
        )
        out.append(figure)
    return out
