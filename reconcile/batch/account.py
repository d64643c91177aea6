"""The account of a long run: verdict, notices, and the summary that is written."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

from .. import export
from ..bounds import bound_notice
from ..errors import Location, Notice
from .evidence import MOST_FACTORS, Evidence, Flagged
from .pieces import Log
from .totals import Told, Totals
from .work import DETAILED

if TYPE_CHECKING:
    from ..results import Result
    from ..run import Case

__all__ = ["Account"]

_OF_READINGS = ("sigma-above-reading", "counted-twice", "two-answers")


@dataclass
class Account:
    """Says what all parts came to.

    Attributes
    ----------
    case : Case
    log : Log
    totals : Totals
    evidence : Evidence
        After it was written.
    """

    case: Case
    log: Log
    totals: Totals
    evidence: Evidence

    def summary(self, result: Result, chosen: Sequence[Told], patterns: int) -> dict[str, Any]:
        """Machine-readable summary; safe for JSON."""
        out = export.summary_of(result)
        notices = [*self._notices(result, patterns), *self._told_notices(chosen)]
        if self.totals.size > len(chosen):
            # The chosen snapshots are the conspicuous ones: no history of the log can be read from them.
            out.pop("history", None)
        out["verdict"] = self._verdict()
        out["notices"] = [{"code": n.code, "message": n.message} for n in notices]
        out["campaign"] = {
            "snapshots": self.totals.size,
            "words": dict(sorted(self.evidence.words.items())),
            "suspicious": self.totals.suspicious,
            "explained": sum(t.suspicious for t in chosen),
            "flagged": [{c: getattr(f, c) for c in Flagged.__dataclass_fields__} for f in self.evidence.flagged],
            "cells_without_a_number": _nested(self.totals.counts),
            "patterns_of_absent_readings": patterns,
        }
        return out

    def _verdict(self) -> str:
        says = {
            "agrees": "agree",
            "watch": "to watch",
            "does not agree": "do not agree",
            "not solved": "could not be solved",
        }
        counted = ", ".join(f"{n} {says.get(w, w)}" for w, n in self.evidence.words.most_common())
        text = f"{self.totals.size} snapshots: {counted}."
        if self.evidence.flagged:
            f = self.evidence.flagged[0]
            text += f" Most often the largest test value: {f.meter} ({f.snapshots} of {self.totals.suspicious} beyond the limit)."
        return text

    def _told_notices(self, chosen: Sequence[Told]) -> list[Notice]:
        out = []
        explained = sum(t.suspicious for t in chosen)
        if self.totals.suspicious > explained:
            out.append(
                Notice(
                    "explained-in-part",
                    f"{self.totals.suspicious} snapshots are beyond their limit; {explained} of them are explained one by one "
                    f"(the strongest of each meter, {DETAILED} at most or one for each meter), the others are told by meter, "
                    "first and last snapshot in flagged.csv",
                )
            )
        if self.totals.size > DETAILED:
            out.append(
                Notice(
                    "tables-in-part",
                    "balances.csv, figures.csv and suspects.csv hold the explained snapshots and the first one only",
                )
            )
        return out

    def _notices(self, result: Result, patterns: int) -> list[Notice]:
        seen: list[Notice] = []
        of_files = [n for layout in self.log.layouts for n in layout.table.notices if n.code != "irregular-step"]
        of_result = [n for n in result.notices if n.code != "bound-violated"]
        if self.totals.size > result.size:
            words = " (seen in the explained snapshots)"
            of_result = [replace(n, message=n.message + words) if n.code in _OF_READINGS else n for n in of_result]
        for n in [*of_result, *of_files, *self.totals.notices, *self._cell_notices(), *self._bound_notices()]:
            if n not in seen:
                seen.append(n)
        if patterns > MOST_FACTORS:
            words = f"readings are absent in {patterns} patterns; the covariance of the {MOST_FACTORS} most frequent is written"
            seen.append(Notice("covariance-in-part", words))
        if len(self.evidence.exact) < sum(d > 0 for _, _, d in self.totals.patterns.values()):
            seen.append(
                Notice(
                    "limit-of-independent-tests",
                    "where rarely seen patterns of readings are absent, the largest test value was compared with the limit "
                    "for independent tests, which is never the smaller one: some snapshots to watch might not agree",
                )
            )
        return seen

    def _cell_notices(self) -> list[Notice]:
        return [
            Notice("readings-not-used", f"{tag}: {n} readings not used, {words}", Location(tag=tag))
            for (tag, words), n in sorted(self.totals.counts.items())
            if words != "no value"
        ]

    def _bound_notices(self) -> list[Notice]:
        return [
            bound_notice(
                self.case.model,
                self.case.parts.spec,
                int(self.case.model.shown[v]),
                word,
                int(n),
                worst,
                self.totals.size,
            )
            for (v, word), (n, worst) in sorted(self.totals.bounds.items())
        ]


def _nested(counts: Counter[tuple[str, str]]) -> dict[str, dict[str, int]]:
    out: dict[str, dict[str, int]] = {}
    for (tag, words), n in sorted(counts.items()):
        out.setdefault(tag, {})[words] = n
    return out
