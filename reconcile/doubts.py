"""Things that are allowed and yet deserve a second look: said with the result, never refused."""

from __future__ import annotations

from itertools import combinations
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .errors import Notice

if TYPE_CHECKING:
    from .case.spec import CaseSpec
    from .model import Model
    from .network import Network

__all__ = ["doubts_of_case", "doubts_of_readings"]

Array = npt.NDArray[np.float64]

COUNTED_TWICE = 0.01
"""Readings that equal a sum within this share are suspected to be counted twice; common practice, no source."""

MOST_ON_ONE_SIDE = 12


def doubts_of_case(spec: CaseSpec) -> list[Notice]:
    """Doubts that the case alone raises.

    Parameters
    ----------
    spec : CaseSpec

    Returns
    -------
    list of Notice
    """
    out = []
    laws = {tuple((p.kind, p.value) for p in m.sigma.components) for m in spec.meters.values()}
    if len(spec.meters) > 2 and laws == {(("absolute", 1.0),)}:
        out.append(
            Notice(
                "same-sigma", f"All {len(spec.meters)} sigmas are 1. The weights then depend on the units. Intended?"
            )
        )
    guessed = [m.tag for m in spec.meters.values() if m.sigma.marked_guess]
    if guessed:
        out.append(
            Notice("guessed-sigma", f"The sigma of {', '.join(guessed)} is a guess that the case marks as such.")
        )
    return out


def doubts_of_readings(model: Model, network: Network, readings: Array) -> list[Notice]:
    """Doubts that readings raise beside their sigmas and their places.

    Parameters
    ----------
    model : Model
    network : Network
    readings : ndarray, shape (N, number of meters)
        In the unit of each meter; nan where absent.

    Returns
    -------
    list of Notice
    """
    return [*_hardly_a_reading(model, readings), *_counted_twice(model, network, readings)]


def _hardly_a_reading(model: Model, readings: Array) -> list[Notice]:
    """Sigma larger than the reading of something that cannot be negative."""
    base = model.to_base(readings)
    out = []
    for j, i in enumerate(model.meters):
        r = model.readings[i]
        columns = [model.system.column(n) for n, _ in r.reads]
        seen = np.flatnonzero(np.isfinite(readings[:, j]) & (readings[:, j] != 0))
        if not seen.size or not np.all(model.lower[columns] >= 0):
            continue
        sigma = float(model.total_sigma(np.nan_to_num(base[seen[0]]))[i] / abs(r.factor))
        typical = float(np.median(np.abs(readings[seen, j])))
        many = " (median)" if seen.size > 1 else ""
        if sigma > typical:
            out.append(
                Notice(
                    "sigma-above-reading",
                    f"{r.tag} = {typical:g} {r.unit}{many} with sigma {sigma:.3g}: the reading says almost nothing. Kept.",
                )
            )
    return out


def _counted_twice(model: Model, network: Network, readings: Array) -> list[Notice]:
    """A reading on one side of a node that equals the sum of others on the same side."""
    tag_of: dict[tuple[str, str, str], int] = {}
    for j, i in enumerate(model.meters):
        r = model.readings[i]
        if len(r.reads) == 1:
            stream, _, quantity = r.reads[0][0].partition(".")
            tag_of.setdefault((stream, quantity, r.unit), j)
    out = []
    for node in network.nodes:
        for word, streams in (("into", network.entering(node)), ("out of", network.leaving(node))):
            for quantity, unit in dict.fromkeys((q, u) for s, q, u in tag_of if s in streams):
                metered = [tag_of[s, quantity, unit] for s in streams if (s, quantity, unit) in tag_of]
                if 3 <= len(metered) <= MOST_ON_ONE_SIDE:
                    out += _sums(model, node, word, metered, readings)
    return out


def _sums(model: Model, node: str, word: str, metered: list[int], readings: Array) -> list[Notice]:
    tags = [model.readings[i].tag for i in model.meters]
    complete = readings[np.isfinite(readings[:, metered]).all(axis=1)]
    for whole in metered:
        others = [j for j in metered if j != whole]
        for count in range(2, len(others) + 1):
            for parts in combinations(others, count):
                total, sum_ = complete[:, whole], complete[:, list(parts)].sum(axis=1)
                if (
                    len(complete)
                    and np.all(np.abs(total - sum_) <= COUNTED_TWICE * np.abs(total))
                    and np.all(total > 0)
                ):
                    named = " + ".join(tags[j] for j in parts)
                    return [
                        Notice(
                            "counted-twice",
                            f"{tags[whole]}, {' and '.join(tags[j] for j in parts)} are all flows {word} {node!r}, and "
                            f"{named} equals {tags[whole]} within {100 * COUNTED_TWICE:g} %: is the same flow counted twice?",
                        )
                    ]
    return []
