"""From a case and a log to an adjusted sequence of windows: lengths, what is known once, candidates for faults."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .adjust.sequence import Chain, Push, Sequence, solve_sequence
from .adjust.table import adjust_table
from .campaign.source import plan_of
from .campaign.tied import Row, in_a_row
from .case.trajectory import TrajectorySpec, change_factor
from .errors import InputError, Location, Notice, Problem
from .model import Candidate, Model
from .refit import problem_of
from .trajectory import Trajectory
from .units import difference_factor

if TYPE_CHECKING:
    from .case.spec import CaseSpec
    from .readings.table import ReadingsTable
    from .run import Case

__all__ = ["run_trajectory"]

Array = npt.NDArray[np.float64]

MOST_SINGLE = 8
"""Single readings with the largest test values beyond the limit that are candidates beside lasting faults."""


def run_trajectory(case: Case, readings: Any = None, *, exclude: Mapping[str, str] | None = None) -> Trajectory:
    """Adjust a sequence of windows as one system.

    Parameters
    ----------
    case : Case
        With a block ``trajectory:``.
    readings : see `Case.run`
        A row a window, in order of time.
    exclude : mapping of tag to reason, optional

    Returns
    -------
    Trajectory

    Raises
    ------
    InputError
        If the case has no trajectory, or the readings or their stamps do not fit.
    SolveError
        If no consistent answer was found.
    """
    spec, model = case.parts.spec, case.model
    tied = spec.trajectory
    if tied is None:
        raise InputError(
            Problem(
                "no-trajectory",
                "the case does not say which inventories tie its windows",
                "add e.g. trajectory: {inventories: {tank: kg}, read_at: start}",
                Location(file=str(spec.path)),
            )
        )
    prepared = case.prepare(readings)
    table, plan = prepared.table, plan_of(spec)
    left_out = case._excluded(exclude or {})
    counters = [t for t in case.tags if plan.of(t).counter is not None]
    row_of_windows = in_a_row(prepared, case.tags, tied.held(spec.meters), counters, at_end=tied.at_end)
    values = row_of_windows.values
    picked = values.copy()
    picked[:, [case.tags.index(t) for t in left_out]] = np.nan
    if row_of_windows.lengths is None:
        lengths, outer_known, notices = _lengths(table, tied, spec)
    else:
        lengths, outer_known, notices = _lengths_of_windows(row_of_windows, tied, spec)
    chain, base = _chain(model, tied, spec, picked, lengths)
    chain = replace(chain, own=_of_all_readings(model, row_of_windows.own, np.nan),
                    scatter=_of_all_readings(model, row_of_windows.scatter, 0.0))  # fmt: skip
    column, row = case.name_of_column, case.name_of_row
    start = None
    if not model.equations.is_linear:
        alone = adjust_table(
            problem_of(model, spec.settings), model.to_base(picked), names=column, row_names=row, sigmas=chain.own,
            scatter=chain.scatter,
        )  # fmt: skip
        start = np.full((len(base), model.size), np.nan)
        for group in alone.groups:
            start[group.rows] = group.x
        start = _filled(start, problem_of(model, spec.settings).start)
    lasting, pushes = _lasting(model, len(base))
    solution = solve_sequence(chain, base, start=start, pushes=pushes, names=column, row_names=row)
    found = Trajectory(
        title=case.title,
        model=model,
        solution=_scaled(solution, lasting),
        candidates=lasting,
        readings=values,
        base=base,
        labels=row_of_windows.labels,
        lengths=lengths,
        outer_known=outer_known,
        settings=spec.settings,
        spec=spec,
        excluded=left_out,
        statuses=row_of_windows.statuses,
        cautions=case.parts.cautions,
        notices=(
            *case.parts.notices,
            *table.notices,
            *row_of_windows.notices,
            *notices,
            *_border_notices(chain, counters, solution.sigma, model, case.tags),
        ),
        provenance=case._provenance(table, spec.settings, "flag"),
    )
    singles, more = _singles(found)
    if not singles:
        return found
    again = solve_sequence(chain, base, start=solution.x, pushes=(*pushes, *more), names=column, row_names=row)
    candidates = (*lasting, *singles)
    return replace(found, solution=_scaled(again, candidates), candidates=candidates)


def _lengths(table: ReadingsTable, tied: TrajectorySpec, spec: CaseSpec) -> tuple[Array, bool, tuple[Notice, ...]]:
    """Length of every window in seconds; a stamp is the instant at which the inventories were read."""
    where = spec.where(("trajectory", "step"))
    count = len(table)
    seconds = None
    if table.time is not None:
        from .readings.time_order import seconds_of

        seconds = np.asarray(seconds_of(table.time), dtype=float)
    if tied.step is not None:
        length = tied.step[0] * difference_factor(tied.step[1], "s")
        if seconds is not None and count > 1:
            off = np.flatnonzero(np.abs(np.diff(seconds) - length) > 1e-3 * length)
            if off.size:
                i = int(off[0])
                raise InputError(
                    Problem(
                        "step-differs",
                        f"the case says windows of {length:g} s, but {np.diff(seconds)[i]:g} s pass from row {i + 1} to "
                        f"row {i + 2} of the readings" + (f"; {off.size} such gaps in all" if off.size > 1 else ""),
                        "write step: from stamps, or put in the missing rows, empty where nothing was read",
                        where,
                    )
                )
        return np.full(count, length), True, ()
    if seconds is None:
        raise InputError(
            Problem(
                "no-step",
                "the readings have no time column, and the trajectory states no step",
                "write e.g. step: 10 min under trajectory:",
                where,
            )
        )
    gaps = np.diff(seconds)
    if np.any(gaps <= 0):
        i = int(np.flatnonzero(gaps <= 0)[0])
        raise InputError(
            Problem(
                "not-rising",
                f"the stamp of row {i + 2} is not after that of row {i + 1}",
                "sort the readings",
                Location(file=table.sources[0] if table.sources else None, row=i + 2),
            )
        )
    typical = float(np.median(gaps)) if gaps.size else 1.0
    lengths = np.concatenate([[typical], gaps]) if tied.at_end else np.concatenate([gaps, [typical]])
    notices = []
    odd = int(np.sum(np.abs(gaps - typical) > 0.5 * typical))
    if odd:
        notices.append(
            Notice(
                "windows-of-different-length",
                f"{odd} windows are much longer or shorter than the usual {typical:g} s; each flow is taken as the mean "
                "over its own window. Put in the missing rows, empty, where nothing was read.",
            )
        )
    return lengths, False, tuple(notices)


def _lengths_of_windows(row: Row, tied: TrajectorySpec, spec: CaseSpec) -> tuple[Array, bool, tuple[Notice, ...]]:
    """Lengths that the windows of a log have, checked against a stated step."""
    assert row.lengths is not None
    notices: tuple[Notice, ...] = ()
    if tied.at_end:
        words = (
            f"what is held is read at the end of each window, so what was held when window {row.labels[0]} began is not used; "
            "write read_at: start to use it"
        )
        notices = (Notice("first-level-not-used", words),)
    if tied.step is None:
        # The log does not tell how long the last window goes on; it does tell when the first one began.
        return row.lengths, tied.at_end, notices
    length = tied.step[0] * difference_factor(tied.step[1], "s")
    differs = np.abs(row.lengths - length) > 1e-3 * length
    off = np.flatnonzero(differs[:-1])  # the log may end within the last window
    if off.size:
        i = int(off[0])
        raise InputError(
            Problem(
                "step-differs",
                f"the case says windows of {length:g} s, but window {row.labels[i]} lasts {row.lengths[i]:g} s"
                + (f"; {off.size} such windows in all" if off.size > 1 else ""),
                "leave step out, so that it is taken from the windows, or correct windows:",
                spec.where(("trajectory", "step")),
            )
        )
    return row.lengths, tied.at_end or not differs[-1], notices


def _of_all_readings(model: Model, part: Array | None, empty: float) -> Array | None:
    """Spread sigmas of the meters' cells, in their units, over all readings of the model in base units."""
    if part is None or not np.any(np.nan_to_num(part)):
        return None
    out = np.full((len(part), len(model.readings)), empty)
    out[:, model.meters] = part * np.abs(model.factor[model.meters])
    return out


def _border_notices(
    chain: Chain, counters: list[str], sigma: Array, model: Model, tags: tuple[str, ...]
) -> tuple[Notice, ...]:
    """Tell where readings of a counter at the borders of windows make up much of its sigma."""
    if chain.scatter is None:
        return ()
    columns = {t: int(model.meters[tags.index(t)]) for t in counters}
    much = [t for t, c in columns.items() if np.median(chain.scatter[:, c] / sigma[:, c]) > 0.5]
    if not much:
        return ()
    words = (
        f"{', '.join(much)}: much of the sigma is that of the counter's readings at the borders of windows. Each is shared by "
        "two windows, so their errors cancel in sums; taken as independent here, they make totals look less sure than they are"
    )
    return (Notice("counter-borders", words),)


def _chain(model: Model, tied: TrajectorySpec, spec: CaseSpec, picked: Array, lengths: Array) -> tuple[Chain, Array]:
    """Put the windows of a sequence together; what is known once is read once."""
    system = model.system
    inventories = [system.column(i.name) for i in tied.inventories.values()]
    problems = [i.name for i, c in zip(tied.inventories.values(), inventories, strict=True) if c in model.fixed]
    if problems:
        raise InputError(
            Problem(
                "inventory-exact",
                f"{', '.join(problems)} is stated as exactly known, in every window",
                "state it with a sigma, or read it",
                spec.where(("known", problems[0])),
            )
        )
    rates = [system.column(i.rate) for i in tied.inventories.values()]
    per_second = [change_factor(i, system.unit(c)) for i, c in zip(tied.inventories.values(), rates, strict=True)]
    once = [
        i
        for i, r in enumerate(model.readings)
        if r.kind == "cause" or (r.kind == "prior" and r.reads[0][0] not in tied.varying)
    ]
    base = model.to_base(picked)
    base[1:, once] = np.nan
    constants = np.setdiff1d(model.columns[once], inventories)
    chain = Chain(
        problem_of(model, spec.settings),
        np.array(inventories, dtype=np.int64),
        np.array(rates, dtype=np.int64),
        lengths[:, None] * np.array(per_second),
        constants,
        tied.at_end,
    )
    return chain, base


def _filled(start: Array, typical: Array) -> Array:
    """Fill windows that could not be solved alone from their neighbours, then from typical values."""
    good = np.flatnonzero(np.isfinite(start).all(axis=1))
    if good.size:
        nearest = good[np.abs(np.arange(len(start))[:, None] - good).argmin(axis=1)]
        return np.asarray(start[nearest])
    return np.tile(np.nan_to_num(typical, nan=1.0), (len(start), 1))


def _lasting(model: Model, windows: int) -> tuple[tuple[Candidate, ...], tuple[Push, ...]]:
    """Every fault of a window as one that lasts throughout the sequence."""
    candidates = tuple(
        replace(c, says=f"{c.says} throughout") if c.kind not in ("constant", "shared error") else c
        for c in model.candidates
    )
    return candidates, tuple(Push(c.reading, c.column, 0, windows) for c in candidates)


def _singles(found: Trajectory) -> tuple[tuple[Candidate, ...], tuple[Push, ...]]:
    """Single readings that stand out, as candidates; all readings of a sequence would be too many to combine."""
    if found.word == "agrees" or not found.checks:
        return (), ()
    meters = found.model.meters
    size = np.abs(np.nan_to_num(found.z[:, meters]))
    order = np.argsort(-size, axis=None, kind="stable")[:MOST_SINGLE]
    candidates, pushes = [], []
    for place in order:
        t, j = np.unravel_index(place, size.shape)
        if not size[t, j] > found.z_limit:
            continue
        i = int(meters[j])
        lasting = found.model.candidates[i]
        rate = found.settings.fault_rate / found.size
        label = found.labels[int(t)]
        label = f"window {label}" if label.isdigit() else label
        candidates.append(
            replace(lasting, name=f"{lasting.name} at {label}", says=f"{lasting.says} at {label} alone", rate=rate)
        )
        pushes.append(Push(i, -1, int(t), int(t) + 1))
    return tuple(candidates), tuple(pushes)


def _scaled(solution: Sequence, candidates: tuple[Candidate, ...]) -> Sequence:
    """Signatures per unit of the candidates instead of base units."""
    return replace(solution, signatures=solution.signatures * np.array([c.scale for c in candidates]))
