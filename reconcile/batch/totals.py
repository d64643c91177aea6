"""What all parts say together: counts, the snapshots worth explaining, the meters most often suspected."""

from __future__ import annotations

import json
from collections import Counter
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import InputError, Location, Notice, Problem
from .heads import Unsuited
from .pieces import Log
from .work import DETAILED, of_each_meter

__all__ = ["GAP", "Told", "Totals", "gather", "parts_of"]

GAP = 10.0
"""Steps longer than this many usual ones are told one by one: the log stood still there."""

MOST_GAPS = 20


@dataclass(frozen=True)
class Told:
    """A snapshot that may be explained."""

    row: int
    label: str
    suspicious: bool
    suspect: int
    objective: float
    readings: npt.NDArray[np.float64]
    reasons: dict[int, str]


@dataclass
class Totals:
    """Sums over all parts.

    Attributes
    ----------
    size : int
    suspicious : int
        Snapshots beyond their limit.
    failed : dict of int to str
        Rows without an answer.
    told : list of Told
        In the order of their rows.
    patterns : dict of bytes to [snapshots, first row, doubtful, tests]
        Patterns of absent readings (packed bits); doubtful are the snapshots whose word depends on the exact limit.
    counts : Counter of (tag, words)
    bounds : dict of (position, word) to [snapshots, worst value]
    notices : list of Notice
    """

    size: int = 0
    suspicious: int = 0
    failed: dict[int, str] = field(default_factory=dict)
    told: list[Told] = field(default_factory=list)
    patterns: dict[bytes, list[int]] = field(default_factory=dict)
    counts: Counter[tuple[str, str]] = field(default_factory=Counter)
    bounds: dict[tuple[int, str], list[float]] = field(default_factory=dict)
    notices: list[Notice] = field(default_factory=list)

    def explained(self, meters: int) -> list[Told]:
        """Snapshots to explain: all of a short log; else the first, and the suspicious ones or the strongest of them."""
        if self.size <= DETAILED:
            return self.told
        chosen = {t.row for t in self.told if t.row not in self.failed and t.row < DETAILED} or set()
        first = min(chosen, default=-1)
        own = [t for t in self.told if t.suspicious]
        if self.suspicious > DETAILED:
            strongest: list[Told] = []
            for meter in sorted({t.suspect for t in own}):
                ranked = sorted((t for t in own if t.suspect == meter), key=lambda t: (-t.objective, t.row))
                strongest += ranked[: of_each_meter(meters)]
            own = strongest
        rows = {t.row for t in own} | ({first} if first >= 0 else set())
        return [t for t in self.told if t.row in rows]


def parts_of(folder: Path, count: int) -> Iterator[dict[str, Any]]:
    """Numbers of each part, in order; `texts` as plain data."""
    for number in range(count):
        with np.load(folder / f"{number:06d}.npz") as arrays:
            part = {name: arrays[name] for name in arrays.files if name not in ("values", "sigmas")}
        part["texts"] = json.loads(part["texts"].tobytes().decode())
        yield part


def gather(folder: Path, count: int, log: Log, low: float) -> Totals:
    """Go through all parts once.

    Parameters
    ----------
    folder : Path
    count : int
        Number of parts.
    log : Log
    low : float
        Limit of a single test: a smaller test value is beyond no limit.

    Raises
    ------
    InputError
        If stamps do not rise.
    Unsuited
        If files overlap in time.
    """
    out = Totals()
    clock = _Clock(log)
    for part in parts_of(folder, count):
        start, texts = out.size, part["texts"]
        out.size += part["objective"].size
        out.suspicious += int(part["suspicious"].sum())
        out.failed.update({start + int(i): words for i, words in texts["failed"].items()})
        reasons: dict[int, dict[int, str]] = {}
        for i, j, words in texts["reasons"]:
            reasons.setdefault(i, {})[j] = words
        for n, i in enumerate(part["told"].tolist()):
            out.told.append(
                Told(
                    start + i, str(part["labels"][i]), bool(part["suspicious"][i]), int(part["suspect"][i]),
                    float(part["objective"][i]), part["readings"][n], reasons.get(i, {}),
                )
            )  # fmt: skip
        out.counts.update({(tag, words): n for tag, words, n in texts["counts"]})
        for position, word, n, worst in texts["bounds"]:
            known = out.bounds.setdefault((position, word), [0, worst])
            known[0] += n
            known[1] = min(known[1], worst) if word == "below" else max(known[1], worst)
        _count_patterns(part, start, low, out)
        clock.add(part, start)
    out.notices += clock.notices()
    return out


def _count_patterns(part: dict[str, Any], start: int, low: float, out: Totals) -> None:
    if "absent" not in part:
        return
    which = part["pattern"]
    doubtful = part["doubtful"] & (np.abs(np.nan_to_num(part["largest"])) > low)
    number = np.bincount(which, minlength=len(part["absent"]))
    doubts = np.bincount(which[doubtful], minlength=len(part["absent"]))
    first = np.full(len(part["absent"]), which.size)
    np.minimum.at(first, which, np.arange(which.size))
    for p, code in enumerate(part["absent"]):
        known = out.patterns.setdefault(code.tobytes(), [0, start + int(first[p]), 0])
        known[0] += int(number[p])
        known[2] += int(doubts[p])


class _Clock:
    """Watches that stamps rise, and where the log stood still."""

    def __init__(self, log: Log) -> None:
        self.log = log
        self.last: tuple[int, str] | None = None
        self.steps: Counter[int] = Counter()
        self.long: list[tuple[int, int, str]] = []
        self.ends = set(np.cumsum(log.rows).tolist())

    def add(self, part: dict[str, Any], start: int) -> None:
        if "stamps" not in part:
            return
        stamps, labels = part["stamps"], part["labels"]
        if self.last is not None:
            stamps = np.concatenate([[self.last[0]], stamps])
            labels = np.concatenate([[self.last[1]], labels])
            start -= 1
        steps = np.diff(stamps)
        wrong = np.flatnonzero(steps <= 0)
        if wrong.size:
            self._complain(int(wrong[0]), start, steps, labels)
        kinds, numbers = np.unique(steps, return_counts=True)
        self.steps.update(dict(zip(kinds.tolist(), numbers.tolist(), strict=True)))
        longest = np.argsort(-steps, kind="stable")[:MOST_GAPS]
        self.long += [(-int(steps[i]), start + int(i), str(labels[i])) for i in longest]
        self.long = sorted(self.long)[:MOST_GAPS]
        self.last = (int(stamps[-1]), str(labels[-1]))

    def _complain(self, i: int, start: int, steps: npt.NDArray[np.int64], labels: Sequence[str]) -> None:
        row = start + i + 1
        if row in self.ends:
            raise Unsuited("its files overlap in time, so that their rows have to be put in order")
        name = self.log.layouts[0].name
        if steps[i] == 0:
            words, hint = (
                f"rows {row} and {row + 1} have the same stamp {labels[i]}",
                "remove one, or declare duplicates",
            )
            raise InputError(Problem("duplicate-stamp", words, hint, Location(name, row=row + 1)))
        words = f"row {row + 1} is earlier than row {row} ({labels[i + 1]} after {labels[i]})"
        hint = "two files appended? Split them, or declare sort = true"
        raise InputError(Problem("time-order", words, hint, Location(name, row=row + 1)))

    def notices(self) -> list[Notice]:
        count = sum(self.steps.values())
        if count < 3:
            return []
        usual = _median(self.steps)
        odd = sum(n for step, n in self.steps.items() if abs(step - usual) > 0.01 * usual)
        if not odd:
            return []
        step, _, label = self.long[0]
        out = [
            Notice(
                "irregular-step",
                f"{odd} of {count} steps are not the usual {usual / 1e9:g} s; the longest is {-step / 1e9:g} s, after {label}",
            )
        ]
        gaps = sorted((row, -s, name) for s, row, name in self.long if -s > GAP * usual)
        if gaps:
            told = ", ".join(f"{s / 1e9:g} s after {name}" for _, s, name in gaps)
            more = " (the longest ones)" if len(gaps) == MOST_GAPS else ""
            out.append(Notice("log-stood-still", f"the log stood still and went on {len(gaps)} times{more}: {told}"))
        return out


def _median(steps: Counter[int]) -> float:
    """Median of steps that are counted by their length."""
    kinds = sorted(steps)
    edges = np.cumsum([steps[k] for k in kinds])
    half = (edges[-1] - 1) // 2, edges[-1] // 2
    low, high = (kinds[int(np.searchsorted(edges, h, side="right"))] for h in half)
    return 0.5 * (low + high)
