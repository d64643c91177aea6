"""Faults that begin or grow: one track per candidate, restarted where its meter was calibrated."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..diagnose.track import CLEAR, Shape, change, cusum, first_alarm
from .sequence import Sequence

__all__ = ["Drift", "Rival", "Track", "TrackStretch", "drifts_of", "tracks_of", "watched"]

Array = npt.NDArray[np.float64]

ALIKE = 0.9
"""Signatures with a larger correlation are hard to tell apart."""

MOST_DRIFTS = 3


@dataclass(frozen=True)
class TrackStretch:
    """A track between two calibrations.

    Attributes
    ----------
    first, last : int
        Snapshots, counted from 0.
    count : int
        Snapshots in between that check the fault.
    alarm_up, alarm_down : int or None
        Snapshot at which the one-sided cumulative sum alarmed.
    step_gain, ramp_gain : float
        Twice the gain in log likelihood of the best step and the best ramp.
    limit : float
        For either, over all onsets and tracks.
    scatter : float
        Mean square from one snapshot to the next, over its expected value; above 1 the sigma is too small.
    shape : str
        ``step``, ``ramp``, or ``open`` where neither is preferred by more than 3.84.
    onset, earliest, latest : int
        First snapshot that the preferred shape moves (the likelier of the two where it is open), and the ends of the
        95 % set.
    size, sigma : float
        Of the fault at the end of the stretch by that shape.
    slope, slope_sigma : float
        Growth per snapshot of the best ramp.
    open_at_alarm : bool or None
        Whether at the first alarm neither shape was preferred yet; None without an alarm.
    """

    first: int
    last: int
    count: int
    alarm_up: int | None
    alarm_down: int | None
    step_gain: float
    ramp_gain: float
    limit: float
    scatter: float
    shape: str
    onset: int
    earliest: int
    latest: int
    size: float
    sigma: float
    slope: float
    slope_sigma: float
    open_at_alarm: bool | None

    @property
    def gain(self) -> float:
        """Larger of the two gains."""
        return max(self.step_gain, self.ramp_gain)

    @property
    def alarm(self) -> int | None:
        """First alarm on either side."""
        given = [a for a in (self.alarm_up, self.alarm_down) if a is not None]
        return min(given) if given else None

    @property
    def changed(self) -> bool:
        """Whether a change is beyond what chance and the scatter seen from snapshot to snapshot account for."""
        return self.alarm is not None and self.gain / self.excess > self.limit

    @property
    def excess(self) -> float:
        """Scatter from snapshot to snapshot where it is larger than expected by more than its own error, else 1."""
        return self.scatter if self.scatter > 1.0 + 1.645 * np.sqrt(3.0 / self.count) else 1.0

    @property
    def from_the_start(self) -> bool:
        """Whether it may have been there from the first snapshot of the stretch on."""
        return self.shape != "ramp" and self.earliest <= self.first


@dataclass(frozen=True)
class Track:
    """A fault through all snapshots, in the unit of its size.

    Attributes
    ----------
    name, kind, item, unit : str
    candidate : int
    sizes : ndarray, shape (N,)
        Least-squares size in every snapshot, if it were the only fault; nan where nothing checks it.
    sigmas : ndarray, shape (N,)
    up, down : ndarray, shape (N,)
        One-sided cumulative sums.
    calibrated : tuple of int
        First snapshots after a calibration, where the track begins anew.
    stretches : tuple of TrackStretch
    """

    name: str
    kind: str
    item: str
    unit: str
    candidate: int
    sizes: Array
    sigmas: Array
    up: Array
    down: Array
    calibrated: tuple[int, ...]
    stretches: tuple[TrackStretch, ...]


@dataclass(frozen=True)
class Rival:
    """Another fault that a change could be.

    Attributes
    ----------
    name, kind, item, unit : str
    correlation : float
        Of its signature with that of the fault that is named.
    behind : float
        Twice the log likelihood that the named one is ahead.
    size, sigma : float
        What it would have to be at the end.
    excluded : bool
        Whether it is behind by more than 3.84.
    touches, instead : tuple of str
        Balances that only the rival, and only the named fault, would disturb.
    """

    name: str
    kind: str
    item: str
    unit: str
    correlation: float
    behind: float
    size: float
    sigma: float
    excluded: bool
    touches: tuple[str, ...]
    instead: tuple[str, ...]


@dataclass(frozen=True)
class Drift:
    """A change that was found, with the tracks that it could be instead."""

    track: Track
    stretch: TrackStretch
    rivals: tuple[Rival, ...]


def tracks_of(sequence: Sequence) -> tuple[Track, ...]:
    """Follow every fault of a meter and every domain's fault that is checked."""
    chosen = [
        i
        for i, c in enumerate(sequence.candidates)
        if sequence.checked[i] and c.kind not in ("constant", "shared error")
    ]
    return tuple(_track(sequence, i, len(chosen)) for i in chosen)


def _track(sequence: Sequence, i: int, tracks: int) -> Track:
    c, n = sequence.candidates[i], sequence.result.size
    score, information = sequence.scores(i)
    marks = _calibrations(sequence, i)
    up, down = np.zeros(n), np.zeros(n)
    stretches = []
    for first, end in zip((0, *marks), (*marks, n), strict=True):
        inside = slice(first, end)
        up[inside], down[inside] = (cusum(score[inside], information[inside], side) for side in (1, -1))
        if not (information[inside] > 0).any():
            continue
        stretches.append(
            _stretch(score[inside], information[inside], up[inside], down[inside], c.side, first, sequence, tracks)
        )
    seen = information > 0
    with np.errstate(divide="ignore", invalid="ignore"):
        sizes, sigmas = np.where(seen, score / information, np.nan), np.where(seen, information**-0.5, np.nan)
    return Track(c.name, c.kind, c.item, c.unit, i, sizes, sigmas, up, down, marks, tuple(stretches))


def _calibrations(sequence: Sequence, i: int) -> tuple[int, ...]:
    """First snapshot after each calibration that falls between the first and the last."""
    spec, c = sequence.result.spec, sequence.candidates[i]
    if spec is None or c.kind != "bias" or c.item not in spec.meters:
        return ()
    starts = {sequence.first_from(when) for when in spec.meters[c.item].options.get("calibrated", ())}
    return tuple(sorted(s for s in starts if s is not None and 0 < s < sequence.result.size))


def _stretch(
    score: Array, information: Array, up: Array, down: Array, side: int, first: int, sequence: Sequence, tracks: int
) -> TrackStretch:
    level = sequence.result.settings.level
    found = change(score, information, level=level, tracks=tracks)
    alarms = [_alarm(up, first) if side >= 0 else None, _alarm(down, first) if side <= 0 else None]
    given = [a for a in alarms if a is not None]
    early = None
    if given:
        end = min(given) - first + 1
        early = abs(float(change(score[:end], information[:end]).favours_ramp)) <= CLEAR
    favours = float(found.favours_ramp)
    shape = "ramp" if favours > CLEAR else "step" if favours < -CLEAR else "open"
    best: Shape = found.ramp if favours > 0 else found.step
    length = len(score) - int(best.onset) if favours > 0 else 1
    seen = information > 0
    z = score[seen] / np.sqrt(information[seen])
    return TrackStretch(
        first=first,
        last=first + len(score) - 1,
        count=int(seen.sum()),
        alarm_up=alarms[0],
        alarm_down=alarms[1],
        step_gain=float(found.step.gain),
        ramp_gain=float(found.ramp.gain),
        limit=found.limit,
        scatter=float((np.diff(z) ** 2).mean() / 2.0) if z.size > 1 else 1.0,
        shape=shape,
        onset=first + int(best.onset),
        earliest=first
        + (int(best.earliest) if shape != "open" else int(min(found.ramp.earliest, found.step.earliest))),
        latest=first + (int(best.latest) if shape != "open" else int(max(found.ramp.latest, found.step.latest))),
        size=float(best.size) * length,
        sigma=float(best.sigma) * length,
        slope=float(found.ramp.size),
        slope_sigma=float(found.ramp.sigma),
        open_at_alarm=early,
    )


def _alarm(sums: Array, first: int) -> int | None:
    at = int(first_alarm(sums))
    return first + at if at >= 0 else None


# ------------------------------------------------------------------ which of them


def drifts_of(sequence: Sequence, tracks: tuple[Track, ...], unchanging: float) -> tuple[Drift, ...]:
    """Name changes one after the other, each with its rivals; what a named one accounts for is taken out first.

    Parameters
    ----------
    sequence : Sequence
    tracks : tuple of Track
        Of it.
    unchanging : float
        What the best fault that does not change, constant or a share of the reading, takes off the sum of squares.

    Returns
    -------
    tuple of Drift
        None that may have been there throughout, or that an unchanging fault accounts for as well.
    """
    out: list[Drift] = []
    now, followed = sequence, tracks
    for _ in range(MOST_DRIFTS):
        changed = [(s, t) for t in followed for s in t.stretches if s.changed and _sign_possible(sequence, t, s)]
        if not changed:
            break
        stretch, track = max(changed, key=lambda pair: (pair[0].gain, -pair[1].candidate))
        if now is sequence and stretch.gain <= unchanging + CLEAR:
            break
        if not (stretch.from_the_start and len(track.stretches) == 1):
            out.append(Drift(track, stretch, _rivals(sequence, track, stretch, followed)))
        now = now.minus(_shift(sequence.result.size, stretch), track.candidate)
        followed = tracks_of(now)
    return tuple(out)


def watched(sequence: Sequence, tracks: tuple[Track, ...]) -> tuple[Track, TrackStretch] | None:
    """Clearest of the tracks that alarmed without a change that is beyond chance, or None."""
    alarmed = [
        (s, t)
        for t in tracks
        for s in t.stretches
        if s.alarm is not None and not s.changed and not s.from_the_start and _sign_possible(sequence, t, s)
    ]
    if not alarmed:
        return None
    stretch, track = max(alarmed, key=lambda pair: (pair[0].gain, -pair[1].candidate))
    return track, stretch


def _sign_possible(sequence: Sequence, track: Track, stretch: TrackStretch) -> bool:
    side = sequence.candidates[track.candidate].side
    return side == 0 or side * stretch.size > 0


def _shift(size: int, s: TrackStretch) -> Array:
    """Size of a change in every snapshot by its likelier shape."""
    out = np.zeros(size)
    at = np.arange(s.onset, s.last + 1)
    ramp = s.ramp_gain > s.step_gain
    out[at] = s.size * (at - s.onset + 1) / len(at) if ramp else s.size
    return out


def _rivals(sequence: Sequence, track: Track, stretch: TrackStretch, tracks: tuple[Track, ...]) -> tuple[Rival, ...]:
    mine = _balances(sequence, track.candidate)
    found = []
    for other in tracks:
        if other.candidate == track.candidate:
            continue
        near = next((s for s in other.stretches if s.first <= stretch.onset <= s.last), None)
        correlation = float(sequence.cosine[track.candidate, other.candidate])
        if near is None or not _sign_possible(sequence, other, near):
            continue
        behind = stretch.gain - near.gain
        if abs(correlation) < ALIKE and behind > CLEAR:
            continue
        theirs = _balances(sequence, other.candidate)
        found.append(
            Rival(
                other.name, other.kind, other.item, other.unit, correlation, behind, near.size, near.sigma,
                behind > CLEAR, tuple(b for b in theirs if b not in mine), tuple(b for b in mine if b not in theirs),
            )
        )  # fmt: skip
    return tuple(sorted(found, key=lambda r: (r.excluded, r.behind, r.name)))


def _balances(sequence: Sequence, candidate: int) -> tuple[str, ...]:
    """Balances of the domains that a fault disturbs."""
    model = sequence.result.model
    c = sequence.candidates[candidate]
    columns = [c.column] if c.column >= 0 else [model.system.column(n) for n, _ in model.readings[c.reading].reads]
    rows = model.system.equations.shape[0]
    touched = np.abs(sequence.parts[0].group.jacobian[:rows][:, columns]).sum(axis=1) > 0
    return tuple(model.row_names[int(r)] for r in np.flatnonzero(touched))
