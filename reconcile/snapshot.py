"""One snapshot in detail: what each reading, balance and possible fault looks like in the light of all others."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .accounts import MOST_FAULTS, Accounts, explain
from .adjust.structure import ties
from .adjust.table import Group
from .checks_in_words import checks_in_words, dependent_in_words, sum_in_words
from .closures import closures_of
from .diagnose.critical import smallest_detectable
from .diagnose.tests_of_balances import (
    NodalTest,
    PrincipalComponentTest,
    nodal_test,
    principal_component_test,
)
from .diagnose.tests_of_readings import (
    GlobalTest,
    SignatureTests,
    global_test,
    signature_tests,
)
from .diagnose.verdict import Conclusion
from .model import Candidate, Model
from .snapshot_lines import BalanceLine, FaultLine, ReadingLine, VariableLine

if TYPE_CHECKING:
    from .results import Result

__all__ = ["Snapshot", "evidence", "look", "signatures"]

Array = npt.NDArray[np.float64]

MOST_REFITS = 8


@dataclass(frozen=True)
class Snapshot:
    """Everything that is known of one snapshot.

    Attributes
    ----------
    label : str
    readings, variables, balances, faults : tuples of lines
    test : GlobalTest
    tests : SignatureTests
        Over all candidates of `faults`, in order.
    meter_tests : SignatureTests
        Over the meters alone, with the limit for their number.
    accounts : Accounts or None
        Explanations; None where there is no check.
    nodal : NodalTest
        Tests of the balances that the raw readings suffice for, in the order of `nodal_rows`.
    nodal_rows : tuple of int
        Which of `balances` these are; balances that others imply are left out.
    components : PrincipalComponentTest
        Their closures on the principal components of their covariance.
    checks_in_words : tuple of str
        The independent checks, each as a combination of variables.
    dependent : tuple of str
        Balances that others imply.
    steps : int
        Linearisations that were needed.
    """

    label: str
    readings: tuple[ReadingLine, ...]
    variables: tuple[VariableLine, ...]
    balances: tuple[BalanceLine, ...]
    faults: tuple[FaultLine, ...]
    test: GlobalTest
    tests: SignatureTests
    meter_tests: SignatureTests
    accounts: Accounts | None
    candidates: tuple[Candidate, ...]
    nodal: NodalTest
    nodal_rows: tuple[int, ...]
    components: PrincipalComponentTest
    checks_in_words: tuple[str, ...]
    dependent: tuple[str, ...]
    steps: int

    @property
    def word(self) -> str:
        """Word of evidence; one to watch does not agree where the corrected test of a reading names one."""
        from .results import word_of_evidence

        word = word_of_evidence(self.test.checks, self.test.p)
        named = np.nanmax(np.abs(self.meter_tests.z), initial=0.0) > self.meter_tests.limit
        return "does not agree" if word == "watch" and named else word

    @property
    def unread(self) -> tuple[VariableLine, ...]:
        """Variables that have no line among the readings: no meter reads them, and nothing is stated of them."""
        return tuple(v for v in self.variables if not v.meters and v.klass not in ("checked", "not checked"))

    def reading(self, tag: str) -> ReadingLine:
        """Line of a meter by its tag."""
        return next(r for r in self.readings if r.tag == tag)

    def variable(self, name: str) -> VariableLine:
        """Line of a variable by its name."""
        return next(v for v in self.variables if v.name == name)

    def fault(self, name: str) -> FaultLine:
        """Line of a candidate fault by its name."""
        return next(f for f in self.faults if f.candidate.name == name)

    def frame_rows(self) -> Iterator[tuple[Any, ...]]:
        """Rows for `Result.to_frame`."""
        named = set()
        for r in self.readings:
            if r.kind != "meter":
                continue
            named.add(r.reads)
            yield (
                self.label, r.reads, r.unit, r.tag, r.klass, r.reading, r.sigma_before, r.adjusted, r.sigma,
                r.adjustment, r.in_sigmas, r.share, r.smallest,
            )  # fmt: skip
        for v in self.variables:
            if v.name not in named:
                nothing = (np.nan,) * 2
                yield (
                    self.label, v.name, v.unit, "", v.klass, *nothing, v.adjusted, v.sigma, *nothing, np.nan, np.nan
                )  # fmt: skip


def evidence(result: Result, index: int) -> tuple[Array, Array, tuple[Candidate, ...]]:
    """Parity vector of a snapshot and the signature of every candidate.

    Returns
    -------
    parity : ndarray, shape (r,)
    signatures : ndarray, shape (r, k)
        Per unit of each candidate's own unit.
    candidates : tuple of Candidate
    """
    group = result.group(index)
    row = int(np.flatnonzero(group.rows == index)[0])
    candidates = result.model.candidates
    return group.parity[row], signatures(result.model, group), candidates


def signatures(model: Model, group: Group) -> Array:
    """Signature of every candidate of a model in one linearisation, shape (r, k), per unit of the candidate."""
    scale = np.array([c.scale for c in model.candidates])
    of_faults = group.signatures_of(model.fault_columns)
    return np.hstack([group.signatures, of_faults]) * scale


def look(result: Result, index: int) -> Snapshot:
    """Work out one snapshot of a result in detail.

    Parameters
    ----------
    result : Result
    index : int
        Counted from 0.

    Returns
    -------
    Snapshot

    Raises
    ------
    SolveError
        If no consistent answer was found for this snapshot.
    """
    model, group, settings = result.model_of(index), result.group(index), result.settings
    parity, shifts, candidates = evidence(result, index)
    x = group.x[int(np.flatnonzero(group.rows == index)[0])]
    test = global_test(parity, settings.level)
    norms = np.linalg.norm(shifts, axis=0)
    tests = signature_tests(parity, shifts, settings.level, scale=norms)
    meters = model.meters
    meter_tests = signature_tests(parity, shifts[:, meters], settings.level, scale=norms[meters])
    accounts = _accounts(result, index, parity, test)
    faults = _faults(candidates, tests, shifts, settings)
    readings = _readings(result, index, group, x, meter_tests, shifts, accounts)
    balances = closures_of(result, index, group, x)
    rows = balances.tested()
    closure, covariance = balances.closure[rows], balances.covariance[np.ix_(rows, rows)]
    return Snapshot(
        label=result.labels[index],
        readings=readings,
        variables=_variables(model, group, x),
        balances=balances.lines,
        faults=faults,
        test=test,
        tests=tests,
        meter_tests=meter_tests,
        accounts=accounts,
        candidates=candidates,
        nodal=nodal_test(closure, covariance, settings.level),
        nodal_rows=tuple(int(i) for i in rows),
        components=principal_component_test(closure, covariance, settings.level),
        checks_in_words=checks_in_words(model, group),
        dependent=dependent_in_words(model, group),
        steps=group.steps,
    )


def _accounts(result: Result, index: int, parity: Array, test: GlobalTest) -> Accounts | None:
    """Explanations; with more faults step by step where the case leaves their number open and fewer do not do."""
    most = None
    while True:
        explainer = result.explainer(index, most)
        if explainer is None:
            return None
        found = explain(explainer, parity, result.model_of(index), result.settings.level)
        more = explainer.max_faults + 1
        stuck = found.conclusion is Conclusion.NOT_FOUND and result.settings.max_faults is None
        if not stuck or more > min(MOST_FAULTS, test.checks - 1):
            linear = result.group(index).equations.is_linear
            return found if linear or test.status != "disagrees" else _refitted(result, index, found)
        most = more


def _refitted(result: Result, index: int, found: Accounts) -> Accounts:
    """Standing explanations of a case with products, each solved again with its faults free."""
    from .refit import grant

    standing = []
    for account in found.standing[:MOST_REFITS]:
        exact = [grant(result, index, a) for a in account.alternatives]
        standing.append(replace(account, refitted=tuple(np.nan if g is None else g.left for g in exact)))
    return replace(found, standing=(*standing, *found.standing[MOST_REFITS:]))


# ------------------------------------------------------------------ lines


def _readings(
    result: Result,
    index: int,
    group: Group,
    x: Array,
    tests: SignatureTests,
    shifts: Array,
    accounts: Accounts | None,
) -> tuple[ReadingLine, ...]:
    model, settings = result.model_of(index), result.settings
    base = model.to_base(result.readings[index : index + 1])[0]
    absent = set(group.absent.tolist())
    value_at = x[model.columns]
    reference = np.where(np.isfinite(base), base, value_at) if settings.percent_at == "reading" else value_at
    before = model.total_sigma(reference) / np.abs(model.factor)
    words = _words(model, accounts, tests)
    place = {int(i): j for j, i in enumerate(model.meters)}
    lines = []
    for i, r in enumerate(model.readings):
        if r.kind == "cause":
            continue
        combination = [(model.system.column(n), c) for n, c in r.reads]
        value = (sum(c * x[k] for k, c in combination) - r.offset) / r.factor
        spread = float(np.linalg.norm(sum(c * group.cover[k] for k, c in combination)) / abs(r.factor))
        gone = i in absent
        reading = (base[i] - r.offset) / r.factor
        if not np.isfinite(spread):
            value = np.nan
        move = np.nan if gone else value - reading
        length = float(np.linalg.norm(shifts[:, i]))
        checked = bool(group.checked[i])
        if gone:
            klass = "calculated" if np.isfinite(spread) else "cannot be calculated"
            given = np.isfinite(result.readings[index][place[i]]) if i in place else False
            word = "left out" if r.tag in result.excluded and given else "no reading"
        else:
            klass = "checked" if checked else "not checked"
            word = words.get(r.tag, "sound so far") if checked else "not checked"
        lines.append(
            ReadingLine(
                tag=r.tag,
                reads=_combination(r.reads),
                unit=r.unit,
                kind=r.kind,
                reading=np.nan if gone else float(reading),
                sigma_before=float(before[i]),
                adjusted=float(value),
                sigma=spread,
                adjustment=float(move),
                in_sigmas=float(move / before[i]),
                share=float(np.clip(1.0 - sum(c * group.response[k, i] for k, c in combination), 0.0, 1.0))
                if checked
                else 0.0,
                z=float(tests.z[place[i]]) if i in place and checked else np.nan,
                smallest=smallest_detectable(length, settings.level, settings.power) if checked else np.inf,
                klass=klass,
                word=word,
                origin=r.origin,
            )
        )
    return tuple(lines)


def _combination(reads: Sequence[tuple[str, float]]) -> str:
    text = ""
    for name, c in reads:
        sign = " - " if c < 0 else " + " if text else ""
        text += f"{sign}{name}" if abs(c) == 1 else f"{sign}{abs(c):g} * {name}"
    return text.removeprefix(" ")


def _words(model: Model, accounts: Accounts | None, tests: SignatureTests) -> dict[str, str]:
    """Word for each reading that an explanation names: suspect, or tied where several fit."""
    if accounts is None or not accounts.standing:
        open_ = accounts is not None and accounts.conclusion in (Conclusion.NOT_FOUND, Conclusion.CANNOT_TELL)
        above = np.abs(tests.z) > tests.limit
        return {model.tags[i]: "cannot tell" for i, a in zip(model.meters, above, strict=True) if open_ and a}
    best = accounts.standing[0]
    first = {f.candidate.name for f in best.alternatives[0].faults if f.candidate.reading >= 0}
    if accounts.conclusion is Conclusion.ONE:
        return dict.fromkeys(first, "suspect")
    named: dict[str, str] = {}
    for account in accounts.standing:
        for alternative in account.alternatives:
            for fault in alternative.faults:
                if fault.candidate.reading >= 0:
                    named.setdefault(fault.candidate.name, "tied")
    everywhere = set(named).intersection(
        *({f.candidate.name for f in a.faults} for account in accounts.standing for a in account.alternatives)
    )
    named.update(dict.fromkeys(everywhere, "suspect"))
    return named


def _variables(model: Model, group: Group, x: Array) -> tuple[VariableLine, ...]:
    from .results import classes_of

    classes = classes_of(model, group)
    meters: dict[str, list[str]] = {}
    absent = set(group.absent.tolist())
    for i, r in enumerate(model.readings):
        if r.kind == "meter" and i not in absent:
            for name, _ in r.reads:
                meters.setdefault(name, []).append(r.tag)
    out = []
    for c, klass in zip(model.shown, classes, strict=True):
        name = model.names[c]
        known = group.determined[c]
        out.append(
            VariableLine(
                name=name,
                unit=model.units[c],
                klass=klass,
                adjusted=float(x[c]) if known else np.nan,
                sigma=float(np.linalg.norm(group.cover[c])) if known else np.nan,
                meters=tuple(meters.get(name, ())),
                reason=_why_unknown(model, group, int(c)) if klass == "cannot be calculated" else "",
            )
        )
    return tuple(out)


def _why_unknown(model: Model, group: Group, column: int) -> str:
    position = np.flatnonzero(group.free == column)
    if not position.size:
        return "its reading is absent, and nothing else determines it"
    if group.adjuster.elimination.observable[position[0]]:
        return "it depends on readings that are absent"
    tied = ties(group.adjuster.elimination, int(position[0]))
    if len(tied) < 2:
        return "no balance ties it to a reading"
    terms = {model.names[group.free[k]]: v for k, v in tied.items()}
    return f"only {sum_in_words(terms)} is known"


def _faults(
    candidates: Sequence[Candidate], tests: SignatureTests, shifts: Array, settings: Any
) -> tuple[FaultLine, ...]:
    norms = np.linalg.norm(shifts, axis=0)
    return tuple(
        FaultLine(
            c,
            float(tests.size[i]),
            float(tests.sigma[i]),
            float(tests.low[i]),
            float(tests.high[i]),
            float(tests.z[i]),
            float(tests.leftover[i]),
            smallest_detectable(float(norms[i]), settings.level, settings.power) if np.isfinite(tests.z[i]) else np.inf,
        )
        for i, c in enumerate(candidates)
    )
