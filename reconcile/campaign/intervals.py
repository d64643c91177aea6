"""Censored and saturated cells: intervals that are entered by their middle, or bounds that are not entered at all."""

from __future__ import annotations

from collections.abc import Collection
from dataclasses import replace

import numpy as np

from ..readings.table import ReadingsTable, Status
from .decisions import Entry
from .snapshots import Interval
from .spec import CampaignSpec

__all__ = ["enter_intervals"]


def enter_intervals(
    table: ReadingsTable, spec: CampaignSpec, left_out: Collection[int]
) -> tuple[ReadingsTable, list[Interval], list[Entry]]:
    """Enter the middle of each interval with its rectangular sigma; leave a cell without one of its ends missing.

    Parameters
    ----------
    table : ReadingsTable
        A row a snapshot.
    spec : CampaignSpec
    left_out : collection of int
        Snapshots that no balance is made of.
    """
    if table.lower is None or table.upper is None:
        return table, [], []
    values, status = table.values.copy(), table.status.copy()
    sigma = np.full(values.shape, np.nan) if table.sigma is None else table.sigma.copy()
    reasons = dict(table.reasons)
    found: list[Interval] = []
    log: list[Entry] = []
    for i, j in zip(*np.nonzero(~(np.isnan(table.lower) & np.isnan(table.upper))), strict=True):
        tag, kind = table.columns[j], Status(int(status[i, j]))
        cell = Interval(int(i), tag, float(table.lower[i, j]), float(table.upper[i, j]), kind)
        if int(i) in left_out:
            continue
        label = table.label(int(i))
        if not cell.closed:
            found.append(cell)
            side, end = ("at least", cell.lower) if np.isfinite(cell.lower) else ("at most", cell.upper)
            words = f"{side} {end:.6g}; entered as missing"
            reasons[int(i), int(j)] = words
            log.append(Entry("bound-only", tag, label, amount=end, words=f"{tag}: {words}"))
            continue
        if spec.of(tag).censored == "leave out":
            words = f"between {cell.lower:.6g} and {cell.upper:.6g}; left out, as the case says"
            reasons[int(i), int(j)] = words
            log.append(Entry("interval-left-out", tag, label, amount=cell.middle, sigma=cell.sigma, words=words))
            continue
        values[i, j], sigma[i, j], status[i, j] = cell.middle, cell.sigma, int(Status.ESTIMATED)
        found.append(cell)
        words = (
            f"between {cell.lower:.6g} and {cell.upper:.6g}; entered as {cell.middle:.6g} +/- {cell.sigma:.2g}, "
            "solved at both ends as well"
        )
        reasons[int(i), int(j)] = words
        log.append(Entry("interval-entered", tag, label, amount=cell.middle, sigma=cell.sigma, words=f"{tag}: {words}"))
    return replace(table, values=values, status=status, sigma=sigma, reasons=reasons), found, log
