"""Explanations with names: what the evidence engine found, joined with the faults it speaks of."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from .diagnose.explain import Explainer, Explanation, Explanations
from .diagnose.refusal import Refusal
from .diagnose.verdict import Conclusion, Reason, verdict
from .errors import InputError, Problem
from .model import Candidate, Model

if TYPE_CHECKING:
    from .case.spec import CaseSpec, Settings

__all__ = ["Account", "Accounts", "Alternative", "SizedFault", "explain", "explainer_of"]

Array = npt.NDArray[np.float64]

DEFAULT_FAULTS = 2
MOST_FAULTS = 4
"""Where nothing of up to two faults accounts for the evidence and the case states no number: look so far."""

SIGMAS_OF_A_FAULT = 10.0
"""Prior spread of a bias in sigmas of its meter, where no span is stated; a choice of this program, no source."""

SHARE_OF_SPAN = 0.1
"""Prior spread of a bias as a share of the span, where it is stated; a choice of this program, no source."""


@dataclass(frozen=True)
class SizedFault:
    """A fault and how large it would have to be.

    Attributes
    ----------
    candidate : Candidate
    size, sigma : float
        In the unit of the candidate.
    """

    candidate: Candidate
    size: float
    sigma: float


@dataclass(frozen=True)
class Alternative:
    """One set of faults; `probability` is its own share."""

    faults: tuple[SizedFault, ...]
    probability: float


@dataclass(frozen=True)
class Account:
    """Sets of faults that account for the evidence equally well: no reading here can tell them apart.

    Attributes
    ----------
    alternatives : tuple of Alternative
        The most probable first; sets with impossible signs are left out.
    excluded_by_sign : tuple of Alternative
        Those sets.
    left, limit : float
        Objective that remains, and what it may be at the level of the case; the limit is nan without a check.
    checks : int
        Checks that remain.
    survives : bool
        Whether it is not excluded: what remains is within the limit, and some set has possible signs.
    probability : float
        Of all its alternatives together, given the stated priors.
    refitted : tuple of float
        Where balances hold products: what remains of the objective for each alternative when the snapshot is solved
        again with its faults free, while `left` is the first-order value; empty in linear cases, where both agree.
    """

    alternatives: tuple[Alternative, ...]
    excluded_by_sign: tuple[Alternative, ...]
    left: float
    limit: float
    checks: int
    survives: bool
    probability: float
    refitted: tuple[float, ...] = ()

    @property
    def count(self) -> int:
        """Number of faults in it."""
        return len((self.alternatives or self.excluded_by_sign)[0].faults)


@dataclass(frozen=True)
class Accounts:
    """All explanations of one snapshot.

    Attributes
    ----------
    conclusion : Conclusion
        What may be concluded.
    reasons : tuple of Reason
        Why not more.
    standing : tuple of Account
        What is not excluded and worth printing; that of the best set first.
    ranked : tuple of Account
        Everything that was listed, most probable first.
    nothing_wrong : float
        Probability that there is no fault at all.
    at_least : int or None
        Smallest number of faults that the evidence allows.
    max_faults : int
    exhaustive : bool
        Whether every set of up to `max_faults` was looked at.
    unexplored : float
        Bound of the probability of sets that were not.
    """

    conclusion: Conclusion
    reasons: tuple[Reason, ...]
    standing: tuple[Account, ...]
    ranked: tuple[Account, ...]
    nothing_wrong: float
    at_least: int | None
    max_faults: int
    exhaustive: bool
    unexplored: float


def explainer_of(
    model: Model,
    signatures: Array,
    settings: Settings,
    spec: CaseSpec | None,
    most: int | None = None,
    candidates: Sequence[Candidate] | None = None,
    values: Array | None = None,
) -> Explainer | None:
    """Prepare the search for explanations in one linearisation.

    Parameters
    ----------
    model : Model
    signatures : ndarray, shape (r, k)
        Of all candidates, per unit of each.
    settings : Settings
        Its `max_faults` is refused where every set would fit; None means the program's choice.
    spec : CaseSpec, optional
        For fault rates of single meters.
    most : int, optional
        Replaces `max_faults`.
    candidates : sequence of Candidate, optional
        What the columns of `signatures` are; those of the model when left out.
    values : ndarray, shape (k,), optional
        Value of each reading, at which a sigma in percent is taken where the case states no expected value.

    Returns
    -------
    Explainer or None
        None where there is no check.

    Raises
    ------
    InputError
        ``too-many-faults``.
    """
    checks = signatures.shape[0]
    if checks == 0:
        return None
    if most is None:
        most = settings.max_faults
    saturated = checks == 1 and most in (None, 1)
    if most is None:
        most = min(DEFAULT_FAULTS, max(checks - 1, 1))
    chosen = model.candidates if candidates is None else candidates
    norms = np.linalg.norm(signatures, axis=0)
    rate, size = _priors(model, settings, spec, chosen, norms, values)
    try:
        return Explainer(
            signatures,
            sides=[c.side for c in chosen],
            fault_rate=rate,
            size_prior=size,
            max_faults=most,
            scale=norms,
            saturated=saturated,
        )
    except Refusal as refusal:
        raise InputError(Problem(refusal.code, refusal.message, refusal.hint)) from None


def _priors(
    model: Model,
    settings: Settings,
    spec: CaseSpec | None,
    candidates: Sequence[Candidate],
    norms: Array,
    values: Array | None,
) -> tuple[Array, Array]:
    """Probability of each candidate, and the spread of its size in its unit."""
    own_rate = {t: m.options.get("fault_rate") for t, m in spec.meters.items()} if spec else {}
    sigma = _typical_sigma(model, values)
    by_unit: dict[str, list[float]] = {}
    for i in model.meters:
        if sigma[i] > 0:
            by_unit.setdefault(model.units[model.columns[i]], []).append(sigma[i] * abs(model.factor[i]))
    # Where no sigma says how large a fault may be, it moves the checks as far as ten sigmas of a checked reading would.
    moving = SIGMAS_OF_A_FAULT / np.where(norms > 0, norms, np.inf)
    rates, sizes = [], []
    for c, by_checks in zip(candidates, moving, strict=True):
        if c.reading >= 0:
            r = model.readings[c.reading]
            stated = own_rate.get(r.tag) if c.rate is None else c.rate
            rates.append(settings.fault_rate if stated is None else float(stated))
            by_sigma = SHARE_OF_SPAN * r.span if np.isfinite(r.span) else SIGMAS_OF_A_FAULT * sigma[c.reading]
            sizes.append(by_sigma if by_sigma > 0 else by_checks)
        else:
            rates.append(settings.leak_rate if c.rate is None else c.rate)
            near = by_unit.get(c.unit)
            sizes.append(SIGMAS_OF_A_FAULT * float(np.median(near)) / c.scale if near else by_checks)
    return np.array(rates), np.maximum(sizes, 1e-300)


def _typical_sigma(model: Model, values: Array | None) -> Array:
    """Sigma of each reading at its expected value, else at the value that is given, in its own unit; 0 if it vanishes."""
    value = np.zeros(len(model.readings)) if values is None else np.nan_to_num(values)
    for i, r in enumerate(model.readings):
        columns = [model.system.column(n) for n, _ in r.reads] if r.kind == "meter" else []
        if columns and all(k in model.design for k in columns):
            value[i] = sum(c * model.design[k] for k, (_, c) in zip(columns, r.reads, strict=True))
    value = np.where(np.isfinite(model.constants), model.constants, value)
    return model.total_sigma(value) / np.abs(model.factor)


def explain(
    explainer: Explainer, parity: Array, model: Model, level: float, candidates: Sequence[Candidate] | None = None
) -> Accounts:
    """Explain one parity vector.

    Parameters
    ----------
    explainer : Explainer
    parity : ndarray, shape (r,)
    model : Model
    level : float
    candidates : sequence of Candidate, optional
        What the explainer was prepared for; those of the model when left out.

    Returns
    -------
    Accounts
    """
    found: Explanations = explainer.explain(parity, level=level)
    said = verdict(found)
    chosen = model.candidates if candidates is None else candidates
    named = {id(e): _account(e, chosen) for e in (*found.listed, *said.rivals)}
    return Accounts(
        conclusion=said.conclusion,
        reasons=said.reasons,
        standing=tuple(named[id(e)] for e in said.rivals),
        ranked=tuple(named[id(e)] for e in found.listed),
        nothing_wrong=found.none,
        at_least=said.at_least,
        max_faults=found.max_faults,
        exhaustive=found.exhaustive,
        unexplored=found.unexplored,
    )


def _account(e: Explanation, candidates: Sequence[Candidate]) -> Account:
    sets = [
        (
            m.allowed,
            Alternative(
                tuple(
                    SizedFault(candidates[i], float(s), float(np.sqrt(v)))
                    for i, s, v in zip(m.candidates, m.sizes, np.diag(m.covariance), strict=True)
                ),
                m.probability,
            ),
        )
        for m in e.members
    ]
    return Account(
        alternatives=tuple(a for ok, a in sets if ok),
        excluded_by_sign=tuple(a for ok, a in sets if not ok),
        left=e.leftover,
        limit=e.limit,
        checks=e.checks_left,
        survives=e.survives,
        probability=e.probability,
    )
