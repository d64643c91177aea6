"""Laboratory samples that belong to windows: the mean of those drawn in each."""

from __future__ import annotations

import hashlib
from dataclasses import replace

import numpy as np

from ..errors import InputError, Location, Notice, Problem, Problems
from ..readings.table import ReadingsTable, Status
from ..readings.time import check_zone_of
from ..readings.time_order import seconds_of
from ..readings.windows import Windows
from .snapshots import digest

__all__ = ["samples_in_windows"]


def samples_in_windows(
    table: ReadingsTable, found: Windows, log: ReadingsTable, lab: ReadingsTable, hashes: tuple[str, ...]
) -> tuple[ReadingsTable, tuple[str, ...], Notice | None]:
    """Set the mean of the samples drawn in each window beside its plant readings.

    Parameters
    ----------
    table : ReadingsTable
        A row a window.
    found : Windows
    log, lab : ReadingsTable
        Both with stamps.
    hashes : tuple of str
        Of what each window is made of so far.

    Returns
    -------
    table : ReadingsTable
        With the columns of the laboratory behind those of the plant.
    hashes : tuple of str
    notice : Notice or None
        On samples outside every window.
    """
    if lab.time is None or log.time is None:
        bare = lab if lab.time is None else log
        name = bare.sources[0] if bare.sources else None
        raise InputError(Problem("time-missing", "samples need stamps to find their window", "add a time column",
                                 Location(name)))  # fmt: skip
    problems = Problems()
    check_zone_of(log.time, log.sources[0] if log.sources else "log", lab.time,
                  lab.sources[0] if lab.sources else "lab", problems)  # fmt: skip
    problems.raise_if_any()
    stamps, drawn = seconds_of(log.time), seconds_of(lab.time)
    shape = (len(table), len(lab.columns))
    values, status = np.full(shape, np.nan), np.full(shape, int(Status.MISSING), dtype=np.int8)
    bounds = {"lower": np.full(shape, np.nan), "upper": np.full(shape, np.nan)}
    reasons = dict(table.reasons)
    k, used = len(table.columns), np.zeros(len(lab), dtype=bool)
    out = list(hashes)
    for w, (a, b) in enumerate(found.bounds.tolist()):
        end = stamps[b] if b < len(stamps) else np.inf
        rows = np.flatnonzero((drawn >= stamps[a]) & (drawn < end))
        used[rows] = True
        for j in range(shape[1]):
            kinds = lab.status[rows, j]
            open_ = np.isin(kinds, [int(Status.CENSORED_LOW), int(Status.CENSORED_HIGH), int(Status.SATURATED)])
            good = lab.usable[rows, j]
            if open_.any() and lab.lower is not None and lab.upper is not None:
                status[w, j] = kinds[open_][0]
                cells = good | open_
                for name, source in (("lower", lab.lower), ("upper", lab.upper)):
                    bounds[name][w, j] = np.mean(np.where(open_, source[rows, j], lab.values[rows, j])[cells])
                reasons[w, k + j] = f"{int(open_.sum())} of {rows.size} samples are only bounds, so the mean is one"
            elif good.any():
                values[w, j], status[w, j] = float(lab.values[rows, j][good].mean()), int(Status.GOOD)
            else:
                reasons[w, k + j] = "no sample was drawn in the window"
        out[w] = hashlib.sha256((out[w] + "".join(digest(lab, r, r + 1) for r in rows.tolist())).encode()).hexdigest()[
            :16
        ]
    notice = None
    if not used.all():
        row = int(np.flatnonzero(~used)[0])
        words = f"{int((~used).sum())} samples were drawn outside every window, the first {lab.label(row)}; not used"
        notice = Notice("sample-outside", words, lab.where(row))
    nan = np.full(table.values.shape, np.nan)
    some = np.isfinite(bounds["lower"]).any() or np.isfinite(bounds["upper"]).any()
    keep = table.lower is not None or some
    joined = replace(
        table,
        columns=table.columns + lab.columns,
        values=np.hstack([table.values, values]),
        status=np.hstack([table.status, status]),
        reasons=reasons,
        lower=np.hstack([nan if table.lower is None else table.lower, bounds["lower"]]) if keep else None,
        upper=np.hstack([nan if table.upper is None else table.upper, bounds["upper"]]) if keep else None,
        scatter=None if table.scatter is None else np.hstack([table.scatter, np.zeros(shape)]),
        units={**table.units, **lab.units},
        echo=table.echo + lab.echo,
        source_hash=hashlib.sha256((table.source_hash + lab.source_hash).encode()).hexdigest(),
    )
    return joined, tuple(out), notice
