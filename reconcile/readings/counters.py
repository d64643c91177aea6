"""Counters: from totals that only ever rise to what passed in each interval, with every decision on record.

A counter that falls has rolled over, was started again, or was misread; no number can be had from it until
somebody says which. Nothing is assumed.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem, Problems
from .options import CappedProblems

__all__ = ["CounterRule", "CounterStep", "Increments", "counter_increments"]

# Beyond this share of falling steps, the column is no counter at all.
_RATE_SHARE = 0.2


@dataclass(frozen=True)
class CounterRule:
    """What is known of a counter.

    Attributes
    ----------
    modulus : float, optional
        Value at which it starts again at zero (rolls over): 100000 for five figures.
    restart : bool
        True if it may be set to zero (new batch, power failure). What passed then is estimated.
    pulse : float
        What one count is worth, in the unit of the increments.
    max_rate : float, optional
        Largest amount per second that can pass; a step above it is not counted.
    sigma : float, optional
        Standard uncertainty of one reading of the counter, in the unit of the increments; default: one count,
        uniformly distributed, ``pulse / sqrt(12)`` (GUM F.2.2.1).
    """

    modulus: float | None = None
    restart: bool = False
    pulse: float = 1.0
    max_rate: float | None = None
    sigma: float | None = None

    @property
    def reading_sigma(self) -> float:
        """Standard uncertainty of one reading."""
        return self.pulse / np.sqrt(12.0) if self.sigma is None else self.sigma


@dataclass(frozen=True)
class CounterStep:
    """One decision about a counter.

    Attributes
    ----------
    row : int
        Row at which the step ends, counted from 0.
    rule : str
        ``rollover``, ``restart``, ``drop-and-recover``, ``spike``, ``too-fast`` or ``gap``.
    amount : float
        What was counted for the interval; NaN if nothing was.
    sigma : float
    alternative : str
        What else it could have been, and what that would have given.
    before, after : float
        The two readings.
    otherwise : float
        Amount that the alternative would have given; NaN where it gives none.
    """

    row: int
    rule: str
    amount: float
    sigma: float
    alternative: str
    before: float
    after: float
    otherwise: float = np.nan


@dataclass(frozen=True)
class Increments:
    """What passed in each interval between two readings.

    Attributes
    ----------
    amounts : (N - 1,) float64
        NaN where nobody can know.
    sigmas : (N - 1,) float64
        Standard uncertainty of each. Neighbours share a reading, so they are correlated: the sigma of a sum is
        `total`'s, not the root of the sum of squares.
    estimated : (N - 1,) bool
        True where the amount is estimated from neighbours.
    log : tuple of CounterStep
    notices : tuple of Notice
    reading_sigma : float
    """

    amounts: npt.NDArray[np.float64]
    sigmas: npt.NDArray[np.float64]
    estimated: npt.NDArray[np.bool_]
    log: tuple[CounterStep, ...]
    notices: tuple[Notice, ...]
    reading_sigma: float

    def total(self, first: int = 0, last: int | None = None) -> tuple[float, float]:
        """Return (amount, sigma) of the intervals first..last - 1.

        Readings inside an unbroken run of counts cancel, so each run costs two readings however long it is; an
        estimated interval adds its own sigma.
        """
        last = self.amounts.size if last is None else last
        amounts, estimated = self.amounts[first:last], self.estimated[first:last]
        counted = ~estimated
        starts = counted & ~np.concatenate([[False], counted[:-1]]) if counted.size else counted
        variance = 2.0 * self.reading_sigma**2 * int(np.sum(starts))
        variance += float(np.sum(self.sigmas[first:last][estimated] ** 2))
        return float(np.sum(amounts)), float(np.sqrt(variance))


def counter_increments(
    values: npt.NDArray[np.float64],
    rule: CounterRule,
    *,
    seconds: npt.NDArray[np.float64] | None = None,
    tag: str = "counter",
    where: Callable[[int], Location] | None = None,
) -> Increments:
    """Turn readings of a counter into increments.

    Parameters
    ----------
    values : (N,) float64
        Readings in counts; NaN where missing: the interval then spans to the next reading and is booked there.
    rule : CounterRule
    seconds : (N,) float64, optional
        Times; needed for `max_rate`.
    tag : str
    where : callable, optional
        Place of a row, counted from 0.

    Raises
    ------
    InputError
        ``counter-falls``: a decrease that no declared rule explains, with the two numbers and the choices;
        ``counter-is-rate``: the column falls too often to be a counter.
    """
    place = where or (lambda row: Location(row=row + 1, tag=tag))
    values = np.asarray(values, dtype=np.float64)
    present = np.flatnonzero(np.isfinite(values))
    n = max(values.size - 1, 0)
    if rule.max_rate is not None and seconds is None:
        raise InputError(
            Problem("max-rate-without-time", f"{tag} has a max_rate, but its rows have no time", "add a time column")
        )
    _refuse_rate(values[present], rule, tag, place)
    work = _Work(values, rule, seconds, np.zeros(n), np.full(n, np.sqrt(2.0) * rule.reading_sigma), [], [])
    problems = CappedProblems()
    steps = list(zip(present[:-1].tolist(), present[1:].tolist(), strict=True))
    skip_to = -1
    for k, (a, b) in enumerate(steps):
        if a < skip_to:
            continue
        if b > a + 1:
            work.amounts[a : b - 1] = 0.0
            words = "readings are missing; the amount is booked where the next one stands"
            work.log.append(CounterStep(b, "gap", np.nan, np.nan, words, float(values[a]), float(values[b])))
        recovered = _recovery(work, steps, k)
        if recovered is not None:
            skip_to = recovered
            continue
        _one_step(work, a, b, tag, place, problems)
    for edge in (slice(0, present[0] if present.size else n), slice(present[-1] if present.size else n, n)):
        work.amounts[edge] = np.nan
        work.sigmas[edge] = np.nan
    problems.raise_if_any()
    _estimate(work)
    estimated = np.zeros(n, dtype=bool)
    for step in work.log:
        if step.rule in ("restart", "too-fast"):
            estimated[step.row - 1] = True
    notices = tuple(_notice(step, tag, place) for step in work.log)
    return Increments(work.amounts, work.sigmas, estimated, tuple(work.log), notices, rule.reading_sigma)


@dataclass
class _Work:
    values: npt.NDArray[np.float64]
    rule: CounterRule
    seconds: npt.NDArray[np.float64] | None
    amounts: npt.NDArray[np.float64]
    sigmas: npt.NDArray[np.float64]
    log: list[CounterStep]
    unknown: list[tuple[int, int, str]]  # (first row, last row, rule) of intervals to be estimated

    def limit(self, a: int, b: int) -> float:
        """Largest amount that can pass between two rows."""
        if self.rule.max_rate is None or self.seconds is None:
            return np.inf
        return float(self.rule.max_rate * (self.seconds[b] - self.seconds[a]))


def _refuse_rate(
    values: npt.NDArray[np.float64], rule: CounterRule, tag: str, where: Callable[[int], Location]
) -> None:
    steps = np.diff(values)
    moving = steps[steps != 0]
    # Falls by nearly the whole range are roll-overs, however often they come.
    fall = moving < 0
    if rule.modulus is not None:
        fall &= moving > -0.5 * rule.modulus
    falling = float(np.mean(fall)) if moving.size else 0.0
    if moving.size >= 10 and falling > _RATE_SHARE:
        place = where(0)
        raise InputError(
            Problem(
                "counter-is-rate",
                f"{tag} decreases {100 * falling:.0f} % of the time: this looks like a rate, not a counter",
                "declare it as a reading of flow",
                Location(file=place.file, tag=tag),
            )
        )


def _recovery(work: _Work, steps: list[tuple[int, int]], k: int) -> int | None:
    """Book an excursion (a drop, or a leap up) from which the counter comes back; return the row where it does.

    Only with some rule declared: without one, nothing is assumed.
    """
    rule, values = work.rule, work.values
    if rule.max_rate is None and rule.modulus is None and not rule.restart:
        return None
    a, odd = steps[k]
    before, there = float(values[a]), float(values[odd])
    drop = there < before
    if not drop and (there - before) * rule.pulse <= work.limit(a, odd):
        return None
    for last, b in steps[k + 1 : k + 4]:
        amount = (float(values[b]) - before) * rule.pulse
        usual = work.limit(a, b)
        if not np.isfinite(usual):
            usual = 3.0 * _typical(work) * (b - a)
        back = abs(float(values[b]) - float(values[last])) * rule.pulse
        # It comes back to where it was, by a leap that no flow explains.
        if not 0.0 <= amount <= usual or back <= usual:
            continue
        work.amounts[a : b - 1] = 0.0
        work.amounts[b - 1] = amount
        span = "" if work.seconds is None else f" in {work.seconds[b] - work.seconds[last]:g} s"
        words = f"the step back, {back:.6g}{span}, was not counted; at most {usual:.6g} can have passed"
        name = "drop-and-recover" if drop else "spike"
        # Counted as read, a drop would be a restart and the way back up an amount; a leap up would stand.
        otherwise = (float(values[b]) if drop else there - before) * rule.pulse
        work.log.append(CounterStep(odd, name, amount, float(work.sigmas[b - 1]), words, before, there, otherwise))
        return b
    return None


def _typical(work: _Work) -> float:
    rises = np.diff(work.values[np.isfinite(work.values)])
    rises = rises[rises >= 0]
    return float(np.median(rises)) * work.rule.pulse if rises.size else 0.0


def _one_step(work: _Work, a: int, b: int, tag: str, where: Callable[[int], Location], problems: Problems) -> None:
    values, rule = work.values, work.rule
    before, after = float(values[a]), float(values[b])
    rise = (after - before) * rule.pulse
    limit = work.limit(a, b)
    if rise >= 0:
        if rise <= limit:
            work.amounts[b - 1] = rise
        else:
            span = "" if work.seconds is None else f" in {work.seconds[b] - work.seconds[a]:g} s"
            words = f"{rise:.6g}{span}, but max_rate allows {limit:.6g}; counted as read, it would be {rise:.6g}"
            _leave_open(work, a, b, "too-fast", words, rise)
        return
    if rule.modulus is not None:
        wrapped = (rule.modulus - before + after) * rule.pulse
        if before < rule.modulus and 0 <= wrapped <= limit and (wrapped <= 0.5 * rule.modulus * rule.pulse):
            work.amounts[b - 1] = wrapped
            words = f"as a restart it would be at least {after * rule.pulse:.6g}"
            step = CounterStep(
                b, "rollover", wrapped, float(work.sigmas[b - 1]), words, before, after, after * rule.pulse
            )
            work.log.append(step)
            return
    if rule.restart and after >= 0:
        words = (
            f"at least {after * rule.pulse:.6g} passed; counted as that, the interval would be {after * rule.pulse:.6g}"
        )
        _leave_open(work, a, b, "restart", words, after * rule.pulse)
        return
    declared = ""
    if rule.modulus is not None:
        declared = f" (a rollover at {rule.modulus:g} would mean {(rule.modulus - before + after) * rule.pulse:.6g})"
    problems.add(
        "counter-falls",
        f"{tag} row {b + 1}: {before:.10g} -> {after:.10g}: rollover, restart at zero, or bad reading? "
        f"Nothing assumed{declared}",
        f"declare modulus = {_next_power(before)} (rollover), or restart = true, or mark the reading as bad",
        where(b),
    )


def _next_power(value: float) -> str:
    return f"{10 ** max(1, int(np.ceil(np.log10(max(abs(value), 1.0) + 1.0)))):d}"


def _leave_open(work: _Work, a: int, b: int, rule: str, alternative: str, otherwise: float) -> None:
    work.unknown.append((a, b, rule))
    work.amounts[b - 1] = np.nan
    before, after = float(work.values[a]), float(work.values[b])
    work.log.append(CounterStep(b, rule, np.nan, np.nan, alternative, before, after, otherwise))


def _estimate(work: _Work) -> None:
    """Estimate the open intervals from their nearest counted neighbours, two on each side."""
    open_ends = {b - 1 for _, b, _ in work.unknown}
    rate = _rates(work)
    known = np.array([i for i in range(rate.size) if i not in open_ends and np.isfinite(rate[i])], dtype=int)
    for a, b, rule in work.unknown:
        left, right = known[known < a][-2:], known[known >= b][:2]
        near = np.concatenate([left, right])
        length = _length(work, a, b)
        amount = sigma = np.nan
        if near.size:
            amount = float(np.mean(rate[near]) * length)
            spread = float(np.std(rate[near], ddof=1)) * length if near.size > 1 else 0.0
            # An interval scatters about the mean of m others as they do about one another, but never less than
            # two readings of the counter allow: s * sqrt(1 + 1/m), the sigma of a prediction.
            spread = max(spread, np.sqrt(2.0) * work.rule.reading_sigma)
            sigma = float(spread * np.sqrt(1.0 + 1.0 / near.size))
        if rule == "restart" and np.isfinite(amount):
            amount = max(amount, float(work.values[b]) * work.rule.pulse)
        work.amounts[b - 1], work.sigmas[b - 1] = amount, sigma
        for i, step in enumerate(work.log):
            if step.row == b and step.rule == rule:
                work.log[i] = replace(step, amount=amount, sigma=sigma)


def _length(work: _Work, a: int, b: int) -> float:
    return float(b - a) if work.seconds is None else float(work.seconds[b] - work.seconds[a])


def _rates(work: _Work) -> npt.NDArray[np.float64]:
    lengths = np.ones(work.amounts.size) if work.seconds is None else np.diff(work.seconds)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(lengths > 0, work.amounts / lengths, np.nan)


def _notice(step: CounterStep, tag: str, where: Callable[[int], Location]) -> Notice:
    booked = {
        "rollover": f"rolled over, {step.amount:.6g} counted",
        "restart": f"was set to zero, {step.amount:.3f} +- {step.sigma:.2g} estimated from its neighbours",
        "drop-and-recover": f"dropped and came back, {step.amount:.6g} counted over both steps",
        "spike": f"leapt up and came back, {step.amount:.6g} counted over both steps",
        "gap": "a gap",
        "too-fast": f"the step was not counted; {step.amount:.6g} +- {step.sigma:.2g} estimated from its neighbours",
    }[step.rule]
    words = f"{tag} row {step.row + 1}: {step.before:.10g} -> {step.after:.10g}: {booked}; {step.alternative}"
    return Notice(f"counter-{step.rule}", words, where(step.row))
