"""Constant or proportional: what several flow levels say of a fault."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from ..diagnose.critical import chi2_limit
from ..diagnose.lookalike import PARALLEL
from ..diagnose.operating import Fit, Stack, both_terms, fit_column, plan_level, stack_columns
from .sequence import Sequence

__all__ = ["FlowLevels", "LevelModel", "NextLevel", "levels_of", "without_scale"]

Array = npt.NDArray[np.float64]

TOO_NOISY = 0.04
"""Values whose squared error is a larger share of their mean square are no regressor: the fit would explain itself."""

SAME_LEVEL = 0.05
"""Values within this share of the largest count as one level."""


@dataclass(frozen=True)
class LevelModel:
    """One fault over all snapshots, constant or proportional.

    Attributes
    ----------
    shape : str
        ``constant``, ``scale`` of one meter, or ``common scale`` of several.
    names : tuple of str
        The fault; for a common scale the meters.
    kind, item, unit : str
        Unit of the size; ``""`` for a scale, whose size is a share.
    size, sigma, left, limit, checks : float
        See `diagnose.operating.Fit`.
    survives : bool
        Neither rejected nor of an impossible sign.
    columns : tuple of int
        Place in the regression.
    """

    shape: str
    names: tuple[str, ...]
    kind: str
    item: str
    unit: str
    size: float
    sigma: float
    left: float
    limit: float
    checks: int
    survives: bool
    column: int


@dataclass(frozen=True)
class NextLevel:
    """Where one more snapshot would tell constant from proportional; nan where nothing on that side would."""

    tag: str
    unit: str
    now: float
    below: float
    above: float
    power: float


@dataclass(frozen=True)
class FlowLevels:
    """Competing models of one fault over all snapshots.

    Attributes
    ----------
    count : int
    tag, unit : str
        Meter whose values are quoted: that of the best scale.
    lowest, highest : float
    left, limit, checks : float, float, int
        Without any fault.
    outcome : str
        ``nothing`` is wrong, ``constant``, ``scale``, ``either`` cannot be told from these levels, ``neither``.
    classes : tuple of tuples of LevelModel
        Models that survive, those that no snapshot here tells apart together; the best first.
    rejected : tuple of LevelModel
        The rest, the best first.
    offset, slope : LevelModel or None
        The best meter with both terms at once.
    noise : float
        Error of the values over their root mean square, squared: by so much the scales may be off.
    next : NextLevel or None
    untried : tuple of str
        Meters for which no error of scale can be tried: what they should read is not known well enough.
    """

    count: int
    tag: str
    unit: str
    lowest: float
    highest: float
    left: float
    limit: float
    checks: int
    outcome: str
    classes: tuple[tuple[LevelModel, ...], ...]
    rejected: tuple[LevelModel, ...]
    offset: Fit | None
    slope: Fit | None
    noise: float
    next: NextLevel | None
    untried: tuple[str, ...]

    @property
    def gain(self) -> float:
        """What the best fault that does not change takes off the sum of squares; 0 where none survives."""
        return max((self.left - c[0].left for c in self.classes), default=0.0)

    @property
    def one_level(self) -> bool:
        """Whether all snapshots lie at one level."""
        return self.highest - self.lowest <= SAME_LEVEL * max(abs(self.highest), abs(self.lowest))

    def model(self, shape: str, name: str) -> LevelModel:
        """Model by its shape and one of its names."""
        every = [m for c in self.classes for m in c] + list(self.rejected)
        return next(m for m in every if m.shape == shape and name in m.names)


@dataclass(frozen=True)
class _Columns:
    """Regression columns: constants of `constant`, then scales of `meters`, then common scales of `groups`."""

    stack: Stack
    constant: list[int]
    meters: list[int]
    groups: list[tuple[int, ...]]
    values: dict[int, Array]
    noise: dict[int, float]

    def scale_of(self, candidate: int) -> int:
        return len(self.constant) + self.meters.index(candidate)


def levels_of(sequence: Sequence) -> FlowLevels:
    """Fit every fault as constant and as proportional, and compare."""
    settings = sequence.result.settings
    level = settings.level
    c = _columns(sequence)
    models = _models(sequence, c, level)
    models.sort(key=lambda m: (m.left, m.shape, m.names))
    alive = [m for m in models if m.survives]
    limit = chi2_limit(level, sequence.checks)
    wrong = sequence.square > limit or sequence.pooled.objective > sequence.pooled.limit
    constant, scale = any(m.shape == "constant" for m in alive), any(m.shape != "constant" for m in alive)
    outcome = "nothing"
    if wrong:
        outcome = "either" if constant and scale else "constant" if constant else "scale" if scale else "neither"
    named = next((m for m in [*alive, *models] if m.shape == "scale"), None)
    candidate = c.meters[named.column - len(c.constant)] if named else -1
    value = c.values[candidate] if named else np.full(1, np.nan)
    value = value[np.isfinite(value)]
    pair = None
    if named and candidate in c.constant:
        pair = both_terms(c.stack, (c.constant.index(candidate), named.column), level)
    return FlowLevels(
        count=sequence.count,
        tag=named.names[0] if named else "",
        unit=sequence.candidates[candidate].unit if named else "",
        lowest=float(value.min(initial=np.inf)),
        highest=float(value.max(initial=-np.inf)),
        left=sequence.square,
        limit=limit,
        checks=sequence.checks,
        outcome=outcome,
        classes=_classes(c.stack, alive) if wrong else (),
        rejected=tuple(m for m in models if not m.survives),
        offset=pair[0] if pair else None,
        slope=pair[1] if pair else None,
        noise=c.noise.get(candidate, np.nan),
        next=_next(sequence, c, alive) if outcome == "either" else None,
        untried=tuple(sequence.candidates[i].name for i in c.meters if not c.noise[i] <= TOO_NOISY),
    )


def without_scale(sequence: Sequence, levels: FlowLevels) -> Sequence:
    """Return the evidence with the best error of scale granted, where the outcome is one."""
    if levels.outcome != "scale":
        return sequence
    best = levels.classes[0][0]
    place = {tag: j for j, tag in enumerate(sequence.result.tags)}
    out = sequence
    for i, c in enumerate(sequence.candidates):
        if c.kind == "bias" and c.name in best.names:
            value = sequence.result.readings[:, place[c.item]]
            if best.shape == "scale":
                score, information = sequence.scores(i)
                value = value - np.divide(score, information, out=np.zeros_like(score), where=information > 0)
            out = out.minus(best.size * np.nan_to_num(value), i)
    return out


def _columns(sequence: Sequence) -> _Columns:
    result, model = sequence.result, sequence.result.model
    checked = sequence.checked
    constant = [i for i, c in enumerate(model.candidates) if checked[i] and c.kind not in ("constant", "shared error")]
    meters = [i for i in constant if model.candidates[i].kind == "bias"]
    place = {int(r): j for j, r in enumerate(model.meters)}
    n = result.size
    values = {i: np.full(n, np.nan) for i in meters}
    noise = {i: np.zeros(n) for i in meters}
    groups = _sides(sequence, meters)
    inner = sorted({i for g in groups for i in g})
    parts = []
    for p in sequence.parts:
        weight = np.ones((len(p.rows), len(constant)))
        scales = np.zeros((len(p.rows), len(meters)))
        for j, i in enumerate(meters):
            f = p.signatures[:, i]
            information = float(f @ f)
            if information <= 0:
                continue
            r = model.candidates[i].reading
            read = result.readings[p.rows, place[r]]
            values[i][p.rows] = read - (p.parity @ f) / information
            noise[i][p.rows] = max(1.0 / information - (p.group.sigma[r] / abs(model.factor[r])) ** 2, 0.0)
            scales[:, j] = values[i][p.rows]
        raw = np.nan_to_num(result.readings[p.rows][:, [place[model.candidates[i].reading] for i in inner]])
        f = np.hstack([p.signatures[:, constant], p.signatures[:, meters], p.signatures[:, inner]])
        parts.append((p.parity, f, np.hstack([weight, scales, raw])))
    whole = stack_columns(parts)
    fixed = len(constant) + len(meters)
    gather = np.zeros((fixed + len(inner), fixed + len(groups)))
    gather[:fixed, :fixed] = np.eye(fixed)
    for g, members in enumerate(groups):
        gather[[fixed + inner.index(i) for i in members], fixed + g] = 1.0
    stack = Stack(whole.square, whole.checks, gather.T @ whole.product, gather.T @ whole.gram @ gather)
    share = {}
    for i in meters:
        seen = np.isfinite(values[i])
        square = float((values[i][seen] ** 2).mean())
        share[i] = float(noise[i][seen].mean() / square) if square > 0 else np.inf
    return _Columns(stack, constant, meters, groups, values, share)


def _sides(sequence: Sequence, meters: list[int]) -> list[tuple[int, ...]]:
    """Meters that read what one balance adds up, and what it takes away, where there are several on a side."""
    model = sequence.result.model
    rows = model.system.equations.shape[0]
    jacobian = sequence.parts[0].group.jacobian[:rows]
    column = {}
    for i in meters:
        reads = model.readings[model.candidates[i].reading].reads
        if len(reads) == 1:
            column[i] = model.system.column(reads[0][0])
    found = []
    for row in jacobian:
        for sign in (1, -1):
            side = tuple(i for i, c in column.items() if sign * row[c] > 0)
            if len(side) > 1 and side not in found:
                found.append(side)
    return found


def _models(sequence: Sequence, c: _Columns, level: float) -> list[LevelModel]:
    out = []
    for j in range(c.stack.product.size):
        fit = fit_column(c.stack, j, level)
        if not np.isfinite(fit.size):
            continue
        if j < len(c.constant):
            one = sequence.candidates[c.constant[j]]
            names: tuple[str, ...] = (one.name,)
            shape, kind, item, unit = "constant", one.kind, one.item, one.unit
            possible = one.side == 0 or one.side * fit.size > 0
        elif j < len(c.constant) + len(c.meters):
            if not c.noise[c.meters[j - len(c.constant)]] <= TOO_NOISY:
                continue
            one = sequence.candidates[c.meters[j - len(c.constant)]]
            shape, names, kind, item, unit, possible = "scale", (one.name,), "scale", one.item, "", True
        else:
            members = c.groups[j - len(c.constant) - len(c.meters)]
            names = tuple(sequence.candidates[i].name for i in members)
            shape, kind, item, unit, possible = "common scale", "scale", "", "", True
        out.append(
            LevelModel(
                shape, names, kind, item, unit, fit.size, fit.sigma, fit.left, fit.limit, fit.checks,
                fit.survives and possible, j,
            )
        )  # fmt: skip
    return out


def _classes(stack: Stack, models: list[LevelModel]) -> tuple[tuple[LevelModel, ...], ...]:
    """Models with parallel columns together."""
    out: list[list[LevelModel]] = []
    for m in models:
        for known in out:
            a, b = m.column, known[0].column
            if abs(stack.gram[a, b]) >= (1 - PARALLEL) * np.sqrt(stack.gram[a, a] * stack.gram[b, b]):
                known.append(m)
                break
        else:
            out.append([m])
    return tuple(tuple(c) for c in out)


def _next(sequence: Sequence, c: _Columns, alive: list[LevelModel]) -> NextLevel | None:
    """Level at which one more snapshot would tell, for the best meter that may be off either way."""
    constants = {m.names[0]: m for m in alive if m.shape == "constant"}
    settings = sequence.result.settings
    for m in alive:
        if m.shape != "scale" or m.names[0] not in constants:
            continue
        i = c.meters[m.column - len(c.constant)]
        _, information = sequence.scores(i)
        seen = (information > 0) & np.isfinite(c.values[i])
        norm = np.sqrt(information[seen])
        plan = plan_level(
            c.values[i][seen],
            norm,
            constants[m.names[0]].size,
            next_norm=float(np.median(norm)),
            level=settings.level,
            power=settings.power,
        )
        now = float(np.mean(c.values[i][seen]))
        return NextLevel(m.names[0], sequence.candidates[i].unit, now, plan.below, plan.above, settings.power)
    return None
