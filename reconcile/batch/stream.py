"""A whole log through in pieces: what has to be settled first, the parts by several threads, and the end."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Callable, Iterator, Mapping
from concurrent.futures import FIRST_COMPLETED, Future, ThreadPoolExecutor, wait
from contextlib import contextmanager
from dataclasses import asdict, dataclass, replace
from importlib import import_module
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..adjust.batch import BLOCK
from ..bounds import limits_of
from ..campaign.source import plan_of
from ..campaign.spec import CampaignSpec, ReadingSpec
from ..diagnose.critical import sidak_limit
from ..errors import InputError, Problem
from ..readings.options import CappedProblems
from ..readings.table import Status
from ..readings.validity import SignalLimits
from .evidence import Flagged
from .finish import Finish, put_in_place, refuse_folders_in_the_way
from .heads import INTERVALS, Unsuited
from .journal import FOLDER, Journal
from .lines import writer_name
from .pieces import Log, open_log
from .totals import gather
from .work import Engine, Worker

if TYPE_CHECKING:
    from ..run import Case

__all__ = ["CHUNK", "STREAM_FROM", "StreamedRun", "Unsuited", "run_streamed"]

STREAM_FROM = 200_000
"""Rows from which a log is worked through in pieces without being asked to."""

CHUNK = 1 << 16
"""Rows of a part."""

_NAMES = (
    "adjusted", "sigmas", "variables", "evidence", "suspects", "balances", "figures", "flagged",
)  # fmt: skip


@dataclass(frozen=True)
class StreamedRun:
    """What a run in pieces came to.

    Attributes
    ----------
    files : tuple of Path
    summary : dict
        What stands in summary.json.
    flagged : tuple of Flagged
    suspicious : int
        Snapshots beyond their limit.
    taken_up : int
        Snapshots of an interrupted run that did not have to be computed again.
    """

    files: tuple[Path, ...]
    summary: dict[str, Any]
    flagged: tuple[Flagged, ...]
    suspicious: int
    taken_up: int


def run_streamed(
    case: Case,
    readings: str | Path | None,
    out: str | Path,
    *,
    exclude: Mapping[str, str] | None = None,
    formats: tuple[str, ...] = ("csv",),
    jobs: int = 1,
    chunk: int | None = None,
    restart: bool = False,
    least: int = STREAM_FROM,
    progress: Callable[[int, int], None] | None = None,
    settings: Mapping[str, Any] | None = None,
) -> StreamedRun:
    """Adjust a log whose rows are snapshots, with bounded memory, in parts that survive an interruption.

    Parameters
    ----------
    case : Case
    readings : path or pattern, optional
        What the case names when left out.
    out : path
        Folder of the corrected data set; parts are kept in its folder ``.parts`` until all is done.
    exclude : mapping of tag to reason, optional
    formats : tuple of str
        ``csv`` and, where asked, ``parquet``.
    jobs : int
        Chunks worked on at the same time. The files are the same bytes for any number.
    chunk : int, optional
        Rows of a part, rounded up to whole blocks of `BLOCK`. The files are the same bytes for any number.
    restart : bool
        Throw away what an interrupted run left in `out`.
    least : int
        Shorter logs are `Unsuited`.
    progress : callable, optional
        ``progress(rows done, rows in all)``, called at the start and after each part.
    settings : mapping, optional
        Settings of the case to replace.

    Returns
    -------
    StreamedRun

    Raises
    ------
    Unsuited
        If this log has to go through memory; the message says why.
    InputError
        With every mistake in the readings, or when a file cannot be written; no half-written file is left under
        its name, and parts that are whole are kept.
    """
    left_out = dict(exclude or {})
    log = _log(case, readings, least)
    chosen = replace(case.parts.spec.settings, **settings) if settings else case.parts.spec.settings
    size = -(-max(1, CHUNK if chunk is None else chunk) // BLOCK) * BLOCK
    target = Path(out)
    # The first rows by the way through memory: contradictory constants and columns that do not fit are found now.
    first = log.layouts[0].table
    case.run(first.take(np.arange(min(len(first), 2))), exclude=left_out, **asdict(chosen))
    provenance = case._provenance(replace(first, source_hash=log.source_hash), chosen, "flag")
    journal = Journal(target, _plan(case, log, size, left_out, chosen, formats, provenance))
    try:
        with _told_plainly(target):
            refuse_folders_in_the_way(target, _finals(formats))
            journal.open(restart=restart)
            return _run(case, log, journal, size, left_out, chosen, formats, provenance, jobs, progress)
    finally:
        journal.close()


def _run(
    case: Case,
    log: Log,
    journal: Journal,
    size: int,
    left_out: dict[str, str],
    chosen: Any,
    formats: tuple[str, ...],
    provenance: dict[str, Any],
    jobs: int,
    progress: Callable[[int, int], None] | None,
) -> StreamedRun:
    first = log.layouts[0].table.select([plan_of(case.parts.spec).of(t).column or t for t in case.tags])
    good = first.usable
    typical = np.where(good, first.values, 0.0).sum(axis=0) / np.where(good.any(axis=0), good.sum(axis=0), np.nan)
    engine = Engine(case, chosen, left_out, typical)
    model = case.model
    position = {int(c): v for v, c in enumerate(model.shown)}
    limits = {position[c]: ends for c, ends in limits_of(model, case.parts.spec).items() if c in position}
    plan = plan_of(case.parts.spec)
    headers = tuple(plan.of(t).column or t for t in case.tags)
    signals = {t: plan.of(t).limits for t in case.tags if plan.of(t).limits != SignalLimits()}
    worker = Worker(engine, case.tags, headers, signals, chosen.level, limits, journal.folder, formats, size)
    count = -(-log.size // size)
    taken_up = sum(line["rows"] for line in journal.done.values())
    try:
        with _one_thread_of_algebra():
            _parts(log, journal, worker, count, size, jobs, progress, taken_up)
            totals = gather(journal.folder, count, log, sidak_limit(chosen.level, 1))
            finish = Finish(
                _quiet(case), engine, log, totals, journal.folder, count, chosen, left_out, formats, provenance
            )
            final = journal.folder / "final"
            final.mkdir(exist_ok=True)
            names, summary = finish.write(final)
    except (InputError, Unsuited) as error:
        # Parts of readings that are wrong are of no use; those of a file that went away are.
        if isinstance(error, Unsuited) or error.code not in ("source-vanished", "source-changed"):
            journal.finish()
        raise
    put_in_place(final, journal.target, names)
    journal.finish()
    files = tuple(journal.target / n for n in names)
    return StreamedRun(files, summary, tuple(finish.flagged), totals.suspicious, taken_up)


def _parts(
    log: Log,
    journal: Journal,
    worker: Worker,
    count: int,
    size: int,
    jobs: int,
    progress: Callable[[int, int], None] | None,
    taken_up: int,
) -> None:
    """Compute the parts that are not there yet; at most one chunk more is in memory than there are jobs."""
    wanted = [number not in journal.done for number in range(count)]
    done = taken_up
    if progress is not None:
        progress(done, log.size)
    problems = CappedProblems()
    with ThreadPoolExecutor(max(1, jobs)) as pool:
        running: set[Future[dict[str, Any]]] = set()

        def collect(least: int) -> None:
            nonlocal running, done
            while len(running) > least:
                ready, running = wait(running, return_when=FIRST_COMPLETED)
                for future in ready:
                    try:
                        line = future.result()
                    except InputError as error:
                        problems.extend(error.problems)
                        continue
                    journal.add(line)
                    done += line["rows"]
                    if progress is not None:
                        progress(done, log.size)

        try:
            for number, pieces in log.chunks(size, wanted):
                running.add(pool.submit(worker, number, pieces))
                collect(max(0, jobs - 1) if jobs > 1 else 0)
            collect(0)
        except BaseException:
            for future in running:
                future.cancel()
            raise
    log.unchanged()
    problems.raise_if_any()


def _log(case: Case, readings: str | Path | None, least: int) -> Log:
    spec = case.parts.spec
    plan = plan_of(spec)
    if spec.trajectory is not None:
        raise Unsuited("its windows are tied by inventories")
    if plan.windows is not None or plan.lab is not None or plan.line_ups:
        raise Unsuited("the case makes its snapshots from windows, line-ups or laboratory samples")
    for tag, r in plan.readings.items():
        told_apart = ReadingSpec(
            column=r.column, limits=r.limits, calibrated=r.calibrated, noise=r.noise,
            steady_within=r.steady_within, calculated=False if r.calculated is False else None,
        )  # fmt: skip
        if r != told_apart or r.limits != SignalLimits(low=r.limits.low, high=r.limits.high, span=r.limits.span):
            raise Unsuited(f"how {tag} is to be prepared takes more than one row at a time")
    path = case.readings_path() if readings is None else readings
    if path is None:
        raise Unsuited("")
    options = spec.readings if isinstance(spec.readings, dict) else {}
    given = {k: v for k, v in options.items() if k != "file"}
    if given.get("interval") in ("end", "centre"):
        raise Unsuited("its stamps are moved to the starts of their intervals")
    headers = tuple(plan.of(t).column or t for t in case.tags)
    log = open_log(path, given, headers, case._readers(), least)
    for layout in log.layouts:
        prepared = case.prepare(layout.table)
        if np.any(prepared.table.status == int(Status.DERIVED)):
            raise Unsuited("one of its columns is calculated from others")
        if any(i.closed for i in prepared.intervals):
            raise Unsuited(INTERVALS)
    return log


def _quiet(case: Case) -> Case:
    """The case for snapshots that are prepared already: single cells are not judged a second time."""
    campaign = CampaignSpec(readings={t: ReadingSpec(calculated=False) for t in case.tags})
    return replace(case, parts=replace(case.parts, spec=replace(case.parts.spec, campaign=campaign)))


def _plan(
    case: Case,
    log: Log,
    size: int,
    left_out: Mapping[str, str],
    chosen: Any,
    formats: tuple[str, ...],
    provenance: Mapping[str, Any],
) -> dict[str, Any]:
    """Everything that the bytes of a part depend on, as plain data."""
    plan = {
        "readings": {str(p): h for p, h in zip(log.files, log.hashes, strict=True)},
        "case file": provenance["case_sha256"],
        "rows of a part (--chunk)": size,
        "meters left out": dict(left_out),
        "settings": asdict(chosen),
        "formats": list(formats),
        "program": {k: provenance[k] for k in ("program", "libraries", "domains")},
        "writer of lines": writer_name(),
        "model": _print_of_model(case),
    }
    return dict(json.loads(json.dumps(plan, default=str)))


def _print_of_model(case: Case) -> str:
    """Hash of what the case came to: it may lean on table files and plugins beside the case file."""
    model = case.model
    parts = [repr(model.names), repr(model.units), repr(model.readings), repr(sorted(model.fixed.items()))]
    parts += [repr(model.shared), repr(sorted(model.design.items())), repr(limits_of(model, case.parts.spec))]
    linear = model.equations.linear
    parts += [repr(a.tolist()) for a in (linear.indptr, linear.indices, linear.data, model.equations.rhs)]
    return hashlib.sha256("\n".join(parts).encode()).hexdigest()


def _finals(formats: tuple[str, ...]) -> list[str]:
    names = [f"{stem}.{kind}" for stem in _NAMES for kind in formats]
    return [*names, "covariance.npz", "summary.json", "datapackage.json"]


@contextmanager
def _told_plainly(target: Path) -> Iterator[None]:
    """Turn what the file system says into a message."""
    try:
        yield
    except OSError as error:
        kept = (target / FOLDER / "journal.jsonl").is_file()
        hint = (
            "no file was left half-written and finished parts are kept: make room, and give the same command to go on"
            if kept
            else "nothing was written; choose another folder with --out, or make room"
        )
        raise InputError(
            Problem("cannot-write", f"the folder {str(target)!r} cannot be written: {error.strerror or error}", hint)
        ) from None


@contextmanager
def _one_thread_of_algebra() -> Iterator[None]:
    """Thin matrix products are slower on several threads, and the jobs are the threads."""
    try:
        threads = import_module("threadpoolctl")
    except ImportError:
        yield
        return
    with threads.threadpool_limits(limits=1):
        yield
