"""Audit of the sigmas: names and reasons around the numbers of `diagnose.audit`."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from scipy.special import chdtrc

from ..diagnose.audit import LEAST_SNAPSHOTS, Scatter, audit, scatter, select_factors
from ..diagnose.track import CLEAR
from .sequence import Sequence

__all__ = ["About", "SigmaAudit", "SigmaFactor", "audit_of"]

About = Literal["zero", "mean", "pairs"]

TOO_GOOD = 0.999
MOST_SINGLE = 3


@dataclass(frozen=True)
class SigmaFactor:
    """What the scatter says of one meter's sigma.

    Attributes
    ----------
    tag : str
    share : float
        Share checked, with the sigmas as declared.
    factor, low, high : float
        Factor on the sigma if it is the only wrong one, and its 95 % interval at level 0.05; nan if not auditable,
        unless that is for a tie.
    gain : float
        Twice the gain in log likelihood.
    reason : str
        ``""`` if it can be audited, else ``few`` (snapshots), ``share`` (hardly checked) or ``tied``.
    tied_with : tuple of str
    """

    tag: str
    share: float
    factor: float
    low: float
    high: float
    gain: float
    reason: str
    tied_with: tuple[str, ...] = ()


@dataclass(frozen=True)
class SigmaAudit:
    """Whether the sigmas are what the readings scatter by.

    Attributes
    ----------
    count, checks : int
        Scatter values used, and all their checks.
    about : str
        ``zero``, ``mean`` where a steady fault shows, or ``pairs`` (from one snapshot to the next) where one changes.
    ratio, low, high, p : float
        Mean square per check, its band when all is right, and the probability of a larger one.
    overall, overall_low, overall_high : float
        Factor on all sigmas together.
    limit : float
        For the largest gain.
    status : str
        ``few``, ``no change``, ``one`` (a reading is named), ``rivals`` (one of several), ``all`` (no single
        reading stands out), ``structural`` (something is missing from the balances, and scatters).
    named : tuple of str
        The reading with the largest gain first; then its rivals where the status is ``rivals``.
    together : tuple of (tag, factor, sigma)
        Where several sigmas have to change together.
    hangs_on : tuple of str
        Up to three snapshots without which no change would be indicated; the status is ``few snapshots`` then.
    too_good : bool
        Whether readings agree better than their sigmas allow.
    meters : tuple of SigmaFactor
    """

    count: int
    checks: int
    about: About
    ratio: float
    low: float
    high: float
    p: float
    overall: float
    overall_low: float
    overall_high: float
    limit: float
    status: str
    named: tuple[str, ...]
    together: tuple[tuple[str, float, float], ...]
    hangs_on: tuple[str, ...]
    too_good: bool
    meters: tuple[SigmaFactor, ...]

    def meter(self, tag: str) -> SigmaFactor:
        """Line of a meter by its tag."""
        return next(m for m in self.meters if m.tag == tag)


def audit_of(sequence: Sequence, about: About) -> SigmaAudit:
    """Audit the sigmas of all meters.

    Parameters
    ----------
    sequence : Sequence
    about : {"zero", "mean", "pairs"}
        See `SigmaAudit`.
    """
    model, level = sequence.result.model, sequence.result.settings.level
    parts = _scatters(sequence, about)
    found = audit(parts, level=level)
    few = sequence.count < LEAST_SNAPSHOTS
    tags = [model.readings[i].tag for i in model.meters]
    tied = {i: tuple(tags[j] for j in members if j != i) for members in found.alike for i in members}
    meters = []
    for i, tag in enumerate(tags):
        reason = "tied" if i in tied else "" if np.isfinite(found.gain[i]) else "share"
        if few or (0 < found.seen[i] < LEAST_SNAPSHOTS):
            reason = "few"
        known = reason in ("", "tied")
        meters.append(
            SigmaFactor(
                tag,
                float(found.share[i]),
                float(found.factor[i]) if known else np.nan,
                float(found.factor_low[i]) if known else np.nan,
                float(found.factor_high[i]) if known else np.nan,
                float(found.gain[i]) if known else np.nan,
                reason,
                tied.get(i, ()),
            )
        )
    status = "no change"
    named: tuple[str, ...] = ()
    hangs_on: tuple[str, ...] = ()
    together: tuple[tuple[str, float, float], ...] = ()
    if few:
        status = "few"
    elif found.change_indicated and (hangs_on := _hangs_on(sequence, about)):
        status = "few snapshots"
    elif found.change_indicated:
        best = found.best
        if best >= 0 and found.gain[best] > max(found.limit, found.overall_gain):
            near = np.flatnonzero(np.nan_to_num(found.gain, nan=-np.inf) > found.gain[best] - CLEAR)
            order = sorted(near.tolist(), key=lambda j: -found.gain[j])
            status, named = ("one" if len(order) == 1 else "rivals"), tuple(tags[j] for j in order)
            joint = select_factors(parts, found)
            if len(joint.readings) > 1:
                together = tuple(
                    (tags[j], float(f), float(s))
                    for j, f, s in zip(joint.readings, joint.factor, joint.sigma, strict=True)
                )
        else:
            status = "all"
    p = float(chdtrc(found.checks, found.ratio * found.checks))
    return SigmaAudit(
        found.count, found.checks, about, found.ratio, found.low, found.high, p, found.overall, found.overall_low,
        found.overall_high, found.limit, status, named, together, hangs_on, bool(p > TOO_GOOD), tuple(meters),
    )  # fmt: skip


def _hangs_on(sequence: Sequence, about: About) -> tuple[str, ...]:
    """Fewest snapshots, of those that disagree most, without which no change is indicated; empty if more than three."""
    objective = np.full(sequence.result.size, -np.inf)
    for p in sequence.parts:
        objective[p.rows] = (p.parity**2).sum(axis=1)
    rest, taken = sequence, []
    for i in np.argsort(-objective, kind="stable")[: min(MOST_SINGLE, sequence.count // LEAST_SNAPSHOTS)]:
        rest = rest.without(int(i))
        taken.append(sequence.result.labels[i])
        if not audit(_scatters(rest, about), level=sequence.result.settings.level).change_indicated:
            return tuple(taken)
    return ()


def _scatters(sequence: Sequence, about: About) -> list[Scatter]:
    model = sequence.result.model
    meters = model.meters
    if about == "mean" and not sequence.one_linearisation:
        # Every snapshot has a basis of its own, and no mean: the caller has taken out the steady fault that was named.
        about = "zero"
    parts = [p for p in sequence.parts if about == "zero" or len(p.rows) > 1]
    return [
        scatter(p.parity, p.group.signatures[:, meters], p.group.sigma[meters], about=about)
        for p in parts or sequence.parts
    ]
