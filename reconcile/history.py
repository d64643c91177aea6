"""All snapshots of a result together: steady and growing faults, sigmas, flow levels, a robust second opinion."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from datetime import datetime
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np

from .accounts import Accounts
from .adjust.robust import Loss
from .diagnose.lookalike import PARALLEL
from .over_time.levels import FlowLevels, levels_of, without_scale
from .over_time.one_sided import OneSided, one_sided_of
from .over_time.second_opinion import SecondOpinion, second_opinion_of
from .over_time.sequence import Sequence
from .over_time.sigmas import About, SigmaAudit, audit_of
from .over_time.steady import Steady, Stretch, steady_of, stretches_of, without_steady
from .over_time.tracks import Drift, Track, TrackStretch, drifts_of, tracks_of, watched

if TYPE_CHECKING:
    from .results import Result

__all__ = ["LEAST_FOR_A_SECTION", "History"]

LEAST_FOR_A_SECTION = 20
"""From so many snapshots with checks on, the text of a run says what they say together."""

LOSSES: tuple[Loss, ...] = ("huber", "welsch", "hampel")
MANY = 20_000


class History:
    """What many snapshots say together; every part is worked out when it is first asked for.

    Parameters
    ----------
    result : Result
        Its snapshots are taken in the order in which they stand. Their errors are taken as independent: a part of a
        sigma that is the same in all of them (a calibration) shows as a steady fault within that sigma.
    """

    def __init__(self, result: Result) -> None:
        self.result = result
        self._sequence = Sequence.of(result)
        self._opinions: dict[Loss, SecondOpinion] = {}

    @property
    def count(self) -> int:
        """Snapshots with a check; without any, only `count` and `to_dict` are of use."""
        return self._sequence.count

    @property
    def labels(self) -> tuple[str, ...]:
        """Names of all snapshots."""
        return self.result.labels

    @property
    def enough(self) -> bool:
        """Whether there are so many snapshots with checks that a run says what they tell together."""
        return self.count >= LEAST_FOR_A_SECTION

    @property
    def losses(self) -> tuple[Loss, ...]:
        """Robust losses that are reported: of very many snapshots only Huber's, which is quickest."""
        return LOSSES if self.count <= MANY else LOSSES[:1]

    @property
    def timed(self) -> bool:
        """Whether the snapshots have times, so that calibration dates can be placed."""
        return self._sequence.times is not None

    @cached_property
    def steady(self) -> Steady:
        """Evidence of a fault that is the same in all snapshots."""
        return steady_of(self._sequence)

    @cached_property
    def stretches(self) -> tuple[Stretch, ...]:
        """Consecutive snapshots pooled; empty for fewer than twenty."""
        return stretches_of(self._sequence)

    @cached_property
    def levels(self) -> FlowLevels:
        """Whether a fault is constant or proportional."""
        return levels_of(self._sequence)

    @cached_property
    def one_sided(self) -> tuple[OneSided, ...]:
        """Balances that are off to one side in every record."""
        return one_sided_of(self._sequence, self.levels)

    @cached_property
    def tracks(self) -> tuple[Track, ...]:
        """Every fault through all snapshots."""
        return tracks_of(self._sequence)

    @cached_property
    def drifts(self) -> tuple[Drift, ...]:
        """Changes that were found, the clearest first."""
        return drifts_of(self._sequence, self.tracks, self.levels.gain)

    @cached_property
    def watch(self) -> tuple[Track, TrackStretch] | None:
        """Clearest of the tracks that alarmed without a change beyond chance, where no change was found."""
        if self.drifts or self.levels.outcome in ("constant", "scale", "either"):
            return None
        found = watched(self._sequence, self.tracks)
        if found is None or found[1].alarm is None or self.labels[found[1].alarm] == self.steady.single:
            return None
        return found

    @cached_property
    def audit(self) -> SigmaAudit:
        """Whether the sigmas are what the readings scatter by, steady and growing faults taken out.

        Nothing is named while a balance is off to one side in every record: what is missing there scatters, too.
        """
        about: About = "zero"
        if not self.enough:
            pass
        elif self.drifts:
            about = "pairs" if self._sequence.one_linearisation else "mean"
        elif not self.steady.agrees:
            about = "mean"
        granted = without_scale(self._sequence, self.levels)
        if about == "mean" and granted is self._sequence and not self._sequence.one_linearisation:
            granted = without_steady(granted, self.steady)
        found = audit_of(granted, about)
        if any(o.structural for o in self.one_sided):
            return dataclasses.replace(found, status="structural", named=(), together=())
        return found

    def second_opinion(self, loss: Loss = "huber") -> SecondOpinion:
        """Return a robust estimate of all snapshots: ``huber``, ``welsch`` or ``hampel``."""
        if loss not in self._opinions:
            self._opinions[loss] = second_opinion_of(self._sequence, loss)
        return self._opinions[loss]

    def alike(self, track: Track) -> tuple[Track, ...]:
        """Other tracks with a parallel signature: no reading here tells them apart."""
        cosine = np.abs(self._sequence.cosine[track.candidate])
        return tuple(t for t in self.tracks if t.candidate != track.candidate and cosine[t.candidate] >= 1 - PARALLEL)

    def track(self, name: str) -> Track:
        """Track of a fault by its name."""
        return next(t for t in self.tracks if t.name == name)

    def summary(self) -> str:
        """Return all of it as text."""
        from .report.history import render_history

        return render_history(self)

    def to_dict(self) -> dict[str, Any]:
        """Return all of it as plain data, safe for JSON; None stands for what is not known."""
        if not self.count:
            return {"snapshots": 0}
        return {
            "snapshots": self.count,
            "steady": plain_data(self.steady),
            "stretches": plain_data(self.stretches),
            "levels": plain_data(self.levels),
            "one_sided": [{**plain_data(o), "structural": o.structural} for o in self.one_sided],
            "drifts": [self._drift(d) for d in self.drifts],
            "watch": None if self.watch is None else self._change(*self.watch),
            "sigmas": plain_data(self.audit),
            "second_opinion": {loss: self._opinion(loss) for loss in self.losses},
        }

    def _drift(self, d: Drift) -> dict[str, Any]:
        return {**self._change(d.track, d.stretch), "rivals": plain_data(d.rivals)}

    def _change(self, track: Track, s: TrackStretch) -> dict[str, Any]:
        return {
            "fault": track.name,
            "kind": track.kind,
            "unit": track.unit,
            **plain_data(s),
            "first": self.labels[s.first],
            "last": self.labels[s.last],
            "alarm_up": None if s.alarm_up is None else self.labels[s.alarm_up],
            "alarm_down": None if s.alarm_down is None else self.labels[s.alarm_down],
            "onset": self.labels[s.onset],
            "earliest": self.labels[s.earliest],
            "latest": self.labels[s.latest],
            "from_the_start": s.from_the_start,
        }

    def _opinion(self, loss: Loss) -> dict[str, Any]:
        o = self.second_opinion(loss)
        worst = float(np.nanmax(np.abs(o.difference), initial=0.0))
        return {
            "optimal": bool(o.optimal),
            "largest_violation": _number(float(np.nanmax(o.violation, initial=0.0))),
            "linearised": o.linearised,
            "snapshots_with_several_optima": [self.labels[i] for i in np.flatnonzero(~o.unique)],
            "snapshots_that_differ": [self.labels[i] for i in np.flatnonzero(o.differs)],
            "largest_difference_in_sigmas": worst,
        }


def plain_data(thing: Any) -> Any:
    """Frozen objects, arrays and numbers as plain data; what is not finite becomes None."""
    if isinstance(thing, Accounts):
        return {
            "conclusion": thing.conclusion.name.lower().replace("_", " "),
            "standing": [
                {
                    "alternatives": [
                        [
                            {"fault": f.candidate.name, "unit": f.candidate.unit, "size": _number(f.size),
                             "sigma": _number(f.sigma)}
                            for f in a.faults
                        ]
                        for a in e.alternatives
                    ],
                    "left": _number(e.left),
                    "limit": _number(e.limit),
                    "probability": _number(e.probability),
                }
                for e in thing.standing
            ],
        }  # fmt: skip
    if dataclasses.is_dataclass(thing) and not isinstance(thing, type):
        return {f.name: plain_data(getattr(thing, f.name)) for f in dataclasses.fields(thing)}
    if isinstance(thing, Mapping):
        return {str(k): plain_data(v) for k, v in thing.items()}
    if isinstance(thing, np.ndarray):
        return plain_data(thing.tolist())
    if isinstance(thing, (list, tuple)):
        return [plain_data(v) for v in thing]
    if isinstance(thing, (float, np.floating)):
        return _number(float(thing))
    if isinstance(thing, np.generic):
        return thing.item()
    return thing.isoformat() if isinstance(thing, datetime) else thing


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
