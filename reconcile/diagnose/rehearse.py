"""Rehearsal: draw evidence with known faults, and count how often they are noticed and named.

All happens in parity space, where a reading error of any size is a shift of a standard normal vector; no network is
adjusted. The generator is passed in or seeded, so that a rehearsal can be repeated.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import chdtri, ndtri

from .lookalike import classes
from .refusal import Refusal

__all__ = ["Rate", "Rehearsal", "largest_test", "rehearse", "wilson"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Rate:
    """A share that was counted, with its binomial interval.

    Attributes
    ----------
    count, trials : int
    value, low, high : float
        The share and its Wilson interval; nan without trials.
    """

    count: int
    trials: int
    value: float
    low: float
    high: float


@dataclass(frozen=True)
class Rehearsal:
    """Counts of a rehearsal.

    Attributes
    ----------
    false_alarm : Rate
        Trials without any fault in which the whole-set test alarms.
    noticed : tuple of Rate
        Per injected fault: the whole-set test alarms.
    named : tuple of Rate
        Per injected fault: the first name given is the fault, whether there was an alarm or not.
    named_when_noticed : tuple of Rate
        The same among the trials with an alarm.
    in_class : tuple of Rate
        Per injected fault: the first name given is the fault or one that looks exactly like it.
    confusion : ndarray of int, shape (number of injected faults + 1, k + 1)
        How often each candidate was named in trials with an alarm; the last column counts trials without one, and the
        last row is for no fault.
    """

    false_alarm: Rate
    noticed: tuple[Rate, ...]
    named: tuple[Rate, ...]
    named_when_noticed: tuple[Rate, ...]
    in_class: tuple[Rate, ...]
    confusion: Ints


def wilson(count: int, trials: int, confidence: float = 0.95) -> Rate:
    """Share with its score interval (Wilson 1927, J. Am. Stat. Assoc. 22, 209).

    Parameters
    ----------
    count, trials : int
    confidence : float

    Returns
    -------
    Rate
    """
    if not 0 <= count <= trials:
        raise Refusal("count-out-of-range", f"{count} of {trials} trials is no share")
    if trials == 0:
        nan = float("nan")
        return Rate(0, 0, nan, nan, nan)
    z = float(-ndtri((1 - confidence) / 2))
    share = count / trials
    middle = (share + z * z / (2 * trials)) / (1 + z * z / trials)
    half = z / (1 + z * z / trials) * np.sqrt(share * (1 - share) / trials + z * z / (4 * trials * trials))
    low = 0.0 if count == 0 else float(middle - half)
    high = 1.0 if count == trials else float(middle + half)
    return Rate(count, trials, share, low, high)


def largest_test(signatures: Array, *, scale: npt.ArrayLike | None = None) -> Callable[[Array], Ints]:
    """Namer that takes the candidate with the largest likelihood ratio; ties go to the first.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
    scale : array of shape (k,), optional
        See `lookalike.classes`.

    Returns
    -------
    callable
        From parity vectors of shape (N, r) to candidates of shape (N,).
    """
    alike = classes(np.asarray(signatures, dtype=float), scale=scale)
    if not alike.members:
        raise Refusal("nothing-checked", "none of the candidates is checked by anything")
    first = np.array([m[0] for m in alike.members], dtype=np.int64)

    def name(parity: Array) -> Ints:
        return np.asarray(first[np.argmax(np.abs(parity @ alike.units), axis=1)])

    return name


def rehearse(
    signatures: Array,
    faults: Sequence[Mapping[int, float]],
    *,
    trials: int,
    rng: np.random.Generator | int,
    level: float = 0.05,
    namer: Callable[[Array], Ints] | None = None,
    scale: npt.ArrayLike | None = None,
) -> Rehearsal:
    """Inject faults many times.

    Parameters
    ----------
    signatures : ndarray, shape (r, k)
    faults : sequence of mappings
        Candidate to size, in its own unit; several entries are present together, and naming any of them is right.
    trials : int
        Draws per fault, and as many without one.
    rng : Generator or int
        Source of the noise, or a seed.
    level : float
        Of the whole-set test.
    namer : callable, optional
        From parity vectors (N, r) to named candidates (N,), -1 for none; `largest_test` when left out.
    scale : array of shape (k,), optional
        See `lookalike.classes`.

    Returns
    -------
    Rehearsal
    """
    f = np.asarray(signatures, dtype=float)
    r, k = f.shape
    if r == 0:
        raise Refusal("no-check", "nothing can be rehearsed where nothing is checked")
    if trials < 1:
        raise Refusal("no-trials", "a rehearsal needs at least one trial")
    for fault in faults:
        for i in fault:
            if not 0 <= i < k:
                raise Refusal("unknown-candidate", f"there is no candidate {i}; they are counted from 0 to {k - 1}")
    generator = np.random.default_rng(rng)
    name = namer or largest_test(f, scale=scale)
    label = classes(f, scale=scale).label
    limit = float(chdtri(r, level))
    confusion = np.zeros((len(faults) + 1, k + 1), dtype=np.int64)
    noticed, named, when, near = [], [], [], []
    alarms = 0
    for row, fault in enumerate([*faults, {}]):
        shift = sum((f[:, i] * size for i, size in fault.items()), np.zeros(r))
        p = generator.normal(size=(trials, r)) + shift
        alarm = np.einsum("nr,nr->n", p, p) > limit
        who = np.asarray(name(p), dtype=np.int64)
        told = alarm & (who >= 0)
        confusion[row, :k] = np.bincount(who[told], minlength=k)
        confusion[row, k] = trials - int(told.sum())
        if row == len(faults):
            alarms = int(alarm.sum())
            break
        right = np.isin(who, list(fault))
        twins = np.flatnonzero(np.isin(label, [label[i] for i in fault if label[i] >= 0]))
        noticed.append(wilson(int(alarm.sum()), trials))
        named.append(wilson(int(right.sum()), trials))
        when.append(wilson(int((right & alarm).sum()), int(alarm.sum())))
        near.append(wilson(int((right | np.isin(who, twins)).sum()), trials))
    return Rehearsal(wilson(alarms, trials), tuple(noticed), tuple(named), tuple(when), tuple(near), confusion)
