"""What was decided on the way from the log to the snapshots: one entry a decision, for people and for files."""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import nan

from ..errors import InputError, Notice, Problem
from ..readings.counters import CounterStep
from ..readings.table import ReadingsTable
from .spec import ReadingSpec

__all__ = ["LOG_COLUMNS", "Entry", "in_words_of_the_case", "of_counter", "of_notice"]

LOG_COLUMNS = (
    "rule", "meter", "snapshot", "source", "line", "row", "before", "after", "amount", "sigma", "unit", "otherwise", "words",
)  # fmt: skip


@dataclass(frozen=True)
class Entry:
    """One decision.

    Attributes
    ----------
    rule : str
        Stable code: ``counter-rollover``, ``spike``, ``window-left-out``, ...
    meter, snapshot, source : str
        What it is about; empty where it is about no single one.
    line, row : int or None
        In the source; counted from 1.
    before, after : float
        Readings between which a counter stepped; nan elsewhere.
    amount, sigma, unit
        What was counted, found or entered.
    otherwise : float
        What the rejected reading of the log would have given.
    words : str
    """

    rule: str
    meter: str = ""
    snapshot: str = ""
    source: str = ""
    line: int | None = None
    row: int | None = None
    before: float = nan
    after: float = nan
    amount: float = nan
    sigma: float = nan
    unit: str = ""
    otherwise: float = nan
    words: str = ""

    def cells(self) -> tuple[object, ...]:
        """Values in the order of `LOG_COLUMNS`."""
        return tuple(getattr(self, name) for name in LOG_COLUMNS)


def of_notice(notice: Notice, snapshot: str = "") -> Entry:
    """Entry of what a step of the preparation told."""
    at = notice.where
    return Entry(notice.code, at.tag or "", snapshot, at.file or "", at.line, at.row, words=notice.message)


def of_counter(step: CounterStep, tag: str, rule: ReadingSpec, table: ReadingsTable, snapshot: str) -> Entry:
    """Entry of one decision about a counter; amounts in the unit that people gave."""
    at, factor = table.where(step.row, tag), rule.amount_factor
    told = {
        "rollover": "rolled over",
        "restart": "was set to zero; what passed is estimated from its neighbours",
        "drop-and-recover": "dropped and came back; counted over both steps",
        "spike": "leapt up and came back; counted over both steps",
        "gap": "a gap",
        "too-fast": "a step faster than can be; what passed is estimated from its neighbours",
    }[step.rule]
    return Entry(
        f"counter-{step.rule}",
        tag,
        snapshot,
        at.file or "",
        at.line,
        at.row,
        step.before,
        step.after,
        step.amount / factor,
        step.sigma / factor,
        rule.amount_unit,
        step.otherwise / factor,
        f"{told}; {step.alternative}",
    )


# The room of readings speaks of its rules; a user of a case knows the keys of the case.
_KEYS = (
    ("declare modulus = ", "declare rolls_over_at: "),
    ("restart = true", "starts_again: true"),
    ("max_rate", "largest_rate"),
    ("slope_level, tolerance or keep_unsteady", "steady, steady_within or keep_unsteady"),
    ("the run flag or the duration", "runs_when or length"),
    ("the run flag", "runs_when"),
    ("the duration", "length"),
    ("required or least", "required or least_coverage"),
    ("declare as calculated", "write calculated: true"),
)


def in_words_of_the_case(error: InputError, file: str | None = None) -> InputError:
    """Return the same problems with the names that stand in a case file."""
    out = []
    for problem in error.problems:
        message, hint = problem.message, problem.hint
        for ours, theirs in _KEYS:
            message, hint = message.replace(ours, theirs), hint.replace(ours, theirs)
        where = problem.where if problem.where.file else replace(problem.where, file=file)
        out.append(Problem(problem.code, message, hint, where))
    return InputError(out)
