"""Joins laboratory samples with the readings of the plant at the time of each sample."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem, Problems
from .steady import slope_test
from .table import ReadingsTable, Status
from .time import check_zone_of
from .time_order import seconds_of

__all__ = ["join_lab"]


def join_lab(
    historian: ReadingsTable,
    lab: ReadingsTable,
    *,
    before: float = 600.0,
    after: float = 0.0,
    delays: Mapping[str, float] | None = None,
    change: float = 0.05,
    watch: Sequence[str] | None = None,
) -> ReadingsTable:
    """Set beside each laboratory sample the mean of the plant's readings around its time.

    Parameters
    ----------
    historian : ReadingsTable
        Readings of the plant, with times.
    lab : ReadingsTable
        A row a sample; its time is when the sample was drawn, not when it was analysed.
    before, after : float
        Seconds around the sample that are averaged; for a composite sample, the time over which it was collected.
    delays : mapping of tag to seconds, optional
        How much later than the sample a plant reading sees the same material (negative: earlier).
    change : float
        Relative change within the time averaged that is told.
    watch : sequence of str, optional
        Plant tags whose change is told; None: all.

    Returns
    -------
    ReadingsTable
        A row a sample; the columns of the plant, then those of the laboratory.

    Raises
    ------
    InputError
        Missing times, a zone in only one of the two, a tag in both, samples outside the record.
    """
    problems = Problems()
    plant_name, lab_name = (t.sources[0] if t.sources else n for t, n in ((historian, "plant"), (lab, "laboratory")))
    for table, name in ((historian, plant_name), (lab, lab_name)):
        if table.time is None:
            problems.add("time-missing", f"{name} has no stamps to join on", "add a time column", Location(file=name))
    for tag in historian.columns:
        if tag in lab.columns:
            hint = "rename one, or declare two meters on the same stream"
            problems.add("duplicate-column", f"{tag!r} is in {plant_name} and in {lab_name}", hint, Location(tag=tag))
    problems.raise_if_any()
    assert historian.time is not None
    assert lab.time is not None
    check_zone_of(historian.time, plant_name, lab.time, lab_name, problems)
    problems.raise_if_any()
    seconds, samples = seconds_of(historian.time), seconds_of(lab.time)
    outside = np.flatnonzero((samples + after < seconds[0]) | (samples - before > seconds[-1]))
    if outside.size:
        row = int(outside[0])
        words = f"sample {lab.label(row)} is outside the record of {plant_name}, {historian.time[0]} to {historian.time[-1]}"
        if outside.size > 1:
            words += f"; {outside.size} such samples in all"
        hint = "check date and zone of the samples, or read the record that holds them"
        raise InputError(Problem("sample-outside", words, hint, lab.where(row)))
    values, status, reasons, notices = _means(
        historian, lab, seconds, samples, before, after, delays or {}, change, watch
    )
    k = len(historian.columns)
    nan = np.full(values.shape, np.nan)
    digest = hashlib.sha256((historian.source_hash + lab.source_hash).encode()).hexdigest()
    return replace(
        lab,
        columns=historian.columns + lab.columns,
        values=np.hstack([values, lab.values]),
        status=np.hstack([status, lab.status]),
        reasons={**reasons, **{(i, j + k): words for (i, j), words in lab.reasons.items()}},
        lower=None if lab.lower is None else np.hstack([nan, lab.lower]),
        upper=None if lab.upper is None else np.hstack([nan, lab.upper]),
        units={**historian.units, **lab.units},
        echo=historian.echo + lab.echo,
        notices=historian.notices + lab.notices + tuple(notices),
        source_hash=digest,
    )


def _means(
    plant: ReadingsTable,
    lab: ReadingsTable,
    seconds: npt.NDArray[np.float64],
    samples: npt.NDArray[np.float64],
    before: float,
    after: float,
    delays: Mapping[str, float],
    change: float,
    watch: Sequence[str] | None,
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.int8], dict[tuple[int, int], str], list[Notice]]:
    shape = (samples.size, len(plant.columns))
    values = np.full(shape, np.nan)
    status = np.full(shape, int(Status.MISSING), dtype=np.int8)
    reasons: dict[tuple[int, int], str] = {}
    notices = []
    usable = plant.usable
    for i, moment in enumerate(samples.tolist()):
        worst: tuple[float, str] = (change, "")
        for j, tag in enumerate(plant.columns):
            centre = moment + delays.get(tag, 0.0)
            a = int(np.searchsorted(seconds, centre - before - 1e-6))
            b = int(np.searchsorted(seconds, centre + after + 1e-6, side="right"))
            good = usable[a:b, j]
            x = plant.values[a:b, j][good]
            if not x.size:
                reasons[i, j] = "no good reading around the time of the sample"
                continue
            values[i, j], status[i, j] = float(x.mean()), int(Status.GOOD)
            if x.size >= 4 and values[i, j] != 0.0 and (watch is None or tag in watch):
                slope = slope_test(seconds[a:b][good], x)
                moved = abs(slope.change / values[i, j])
                if slope.p_value < 0.001 and moved > worst[0]:
                    worst = (moved, tag)
        if worst[1]:
            words = f"sample {lab.label(i)} falls in a ramp: {worst[1]} changes by {100 * worst[0]:.2g} % in its time"
            notices.append(Notice("sample-in-ramp", words, lab.where(i, worst[1])))
    return values, status, reasons, notices
