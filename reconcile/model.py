"""Where readings meet balances: every variable of a case as one set of columns, every row as one set of rows.

Columns are the variables of the system, then one for each reading that does not simply read one variable
(a sum, a second meter on the same variable, a meter that shares an error), then one for each shared error.
Such a reading has a row of its own, ``reading - sum(c x) - a * cause = 0``, and a shared error is known to be
0 +/- 1: so the covariance of the readings is full, and the one handed to the kernel stays diagonal.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt
import scipy.sparse as sp

from .system import Equations, FaultKind, System

__all__ = ["Candidate", "Model", "Reading", "SharedError", "build_model"]

Array = npt.NDArray[np.float64]
Ints = npt.NDArray[np.int64]


@dataclass(frozen=True)
class Reading:
    """A value that something outside the balances gives: an instrument, or prior knowledge.

    Attributes
    ----------
    tag : str
        Unique name.
    reads : tuple of (str, float)
        Variables and coefficients, each coefficient in base units per unit of the variable.
    unit : str
        Unit in which the reading is stated.
    relative, absolute : float
        Sigma is ``sqrt((relative * value)^2 + absolute^2)``, `absolute` in `unit`.
    factor, offset : float
        ``base value = factor * reading + offset``; base is the unit of the first variable read.
    kind : str
        ``meter``, ``prior`` (prior knowledge from the case or a domain) or ``cause`` (a shared error).
    value : float
        The value of a prior or cause; nan for a meter.
    span : float
        Width of the instrument's span in `unit`; nan where it is not stated.
    origin : str
        Where its sigma comes from, in words.
    """

    tag: str
    reads: tuple[tuple[str, float], ...]
    unit: str
    relative: float
    absolute: float
    factor: float = 1.0
    offset: float = 0.0
    kind: str = "meter"
    value: float = np.nan
    span: float = np.nan
    origin: str = ""


@dataclass(frozen=True)
class SharedError:
    """One cause behind several readings.

    Attributes
    ----------
    name : str
    tags : tuple of str
        The readings concerned.
    relative, absolute : tuple of float
        Standard deviation that the cause gives each of them: of its value, and in its unit; signs count.
    """

    name: str
    tags: tuple[str, ...]
    relative: tuple[float, ...]
    absolute: tuple[float, ...]


@dataclass(frozen=True)
class Candidate:
    """A fault that an explanation may name.

    Attributes
    ----------
    name : str
        Unique: a tag, or a fault variable's name.
    kind : str
        ``bias`` of a reading, or the kind a domain gave.
    item : str
        Meter tag, node or whatever the fault sits at.
    unit : str
        Unit of its size.
    scale : float
        Base units per unit of `unit`.
    side : int
        +1 or -1 if its size can only have that sign, else 0.
    reading : int
        Index of the reading, or -1.
    column : int
        Column of the fault variable, or -1.
    says, separate : str
        Words for it; see `FaultKind`.
    rate : float or None
        Prior probability where the domain states one.
    """

    name: str
    kind: str
    item: str
    unit: str
    scale: float
    side: int
    reading: int
    column: int
    says: str
    separate: str
    rate: float | None = None


@dataclass(frozen=True)
class Model:
    """A case ready to be adjusted; arrays are in base units.

    Attributes
    ----------
    system : System
    names, units : tuple of str
        Of all columns.
    readings : tuple of Reading
    columns : ndarray of int, shape (k,)
        Column of each reading.
    fixed : mapping of int to float
        Exactly known columns, possible faults (zero) among them.
    shared : tuple of SharedError
    meter_rows : csr_array, shape (q, n)
        Rows that tie indirect readings to variables, without the shared errors.
    row_of_reading : ndarray of int, shape (k,)
        Row within `meter_rows`, or -1 for a reading that reads its variable directly.
    """

    system: System
    names: tuple[str, ...]
    units: tuple[str, ...]
    readings: tuple[Reading, ...]
    columns: Ints
    fixed: Mapping[int, float]
    shared: tuple[SharedError, ...]
    meter_rows: sp.csr_array
    row_of_reading: Ints
    design: Mapping[int, float] = field(default_factory=dict)

    # ------------------------------------------------------------------ columns

    @property
    def size(self) -> int:
        """Number of columns n."""
        return len(self.names)

    @cached_property
    def tags(self) -> tuple[str, ...]:
        """Tags of all readings."""
        return tuple(r.tag for r in self.readings)

    @cached_property
    def meters(self) -> Ints:
        """Indices of the readings that instruments give."""
        return np.array([i for i, r in enumerate(self.readings) if r.kind == "meter"], dtype=np.int64)

    @cached_property
    def unmeasured(self) -> Ints:
        """Columns that are neither read nor known."""
        taken = np.zeros(self.size, dtype=bool)
        taken[self.columns] = True
        taken[list(self.fixed)] = True
        return np.flatnonzero(~taken)

    @cached_property
    def shown(self) -> Ints:
        """Columns that a user knows: variables of the system that are no possible faults."""
        keep = np.zeros(self.size, dtype=bool)
        for block in self.system.blocks:
            if block.fault is None:
                keep[block.start : block.stop] = True
        return np.flatnonzero(keep)

    @cached_property
    def lower(self) -> Array:
        """Lower bounds of all columns."""
        return np.concatenate([self.system.lower, np.full(self.size - self.system.size, -np.inf)])

    @cached_property
    def upper(self) -> Array:
        """Upper bounds of all columns."""
        return np.concatenate([self.system.upper, np.full(self.size - self.system.size, np.inf)])

    # ------------------------------------------------------------------ readings

    @cached_property
    def factor(self) -> Array:
        """Base units per unit of each reading, shape (k,)."""
        return np.array([r.factor for r in self.readings])

    @cached_property
    def offset(self) -> Array:
        """Offset of each reading's unit, in base units, shape (k,)."""
        return np.array([r.offset for r in self.readings])

    @cached_property
    def constants(self) -> Array:
        """Values of priors and causes in base units, nan for meters, shape (k,)."""
        return np.array([r.value for r in self.readings]) * self.factor + self.offset

    @cached_property
    def relative(self) -> Array:
        """Relative part of each sigma, shape (k,)."""
        return np.array([r.relative for r in self.readings])

    @cached_property
    def absolute(self) -> Array:
        """Absolute part of each sigma, in the unit of the reading, shape (k,)."""
        return np.array([r.absolute for r in self.readings])

    @cached_property
    def has_relative(self) -> bool:
        """Whether any sigma depends on the value."""
        return bool(np.any(self.relative > 0) or any(any(s.relative) for s in self.shared))

    def to_base(self, values: Array) -> Array:
        """Readings of the meters in their units -> all readings in base units.

        Parameters
        ----------
        values : ndarray, shape (N, number of meters)

        Returns
        -------
        ndarray, shape (N, k)
            Priors and causes filled in.
        """
        out = np.tile(self.constants, (len(values), 1))
        out[:, self.meters] = values * self.factor[self.meters] + self.offset[self.meters]
        return out

    def stated(self, base: Array) -> Array:
        """Base units -> the unit of each reading, shape (..., k)."""
        return (base - self.offset) / self.factor

    def sigma(self, base: Array) -> Array:
        """Own sigma of each reading at these values, shape (..., k), base units."""
        return np.hypot(self.relative * self.stated(base), self.absolute) * np.abs(self.factor)

    def shared_part(self, base: Array) -> Array:
        """What each shared error contributes to each reading, shape (k, number of causes), base units."""
        out = np.zeros((len(self.readings), len(self.shared)))
        index = {t: i for i, t in enumerate(self.tags)}
        stated = self.stated(base)
        for c, cause in enumerate(self.shared):
            for tag, rel, abso in zip(cause.tags, cause.relative, cause.absolute, strict=True):
                i = index[tag]
                out[i, c] = (rel * stated[i] + abso) * self.factor[i]
        return out

    def total_sigma(self, base: Array) -> Array:
        """Sigma of each reading with its shared errors, shape (k,), base units."""
        own = self.sigma(base)
        return np.sqrt(own**2 + (self.shared_part(base) ** 2).sum(axis=1)) if self.shared else own

    def covariance_of_readings(self, base: Array) -> Array:
        """Full covariance of the readings at these values, shape (k, k), base units; causes left as they are."""
        part = self.shared_part(base)
        return np.diag(self.sigma(base) ** 2) + part @ part.T

    def with_sigmas(self, own: Array, more: Array, closed: Mapping[int, float] | None = None) -> Model:
        """Return the same model for a snapshot whose meters have other sigmas, or whose line-up closes streams.

        Parameters
        ----------
        own : ndarray, shape (number of meters,)
            Sigmas that replace the law of a meter, in its unit; nan where that holds.
        more : ndarray, shape (number of meters,)
            What adds to the law in quadrature.
        closed : mapping of column to value, optional
            Columns that are exactly known there.
        """
        readings = list(self.readings)
        for i, s, m in zip(self.meters.tolist(), own, more, strict=True):
            if np.isfinite(s):
                readings[i] = replace(readings[i], relative=0.0, absolute=float(s))
            elif m > 0:
                readings[i] = replace(readings[i], absolute=float(np.hypot(readings[i].absolute, m)))
        return replace(self, readings=tuple(readings), fixed={**self.fixed, **(closed or {})})

    # ------------------------------------------------------------------ rows

    @cached_property
    def equations(self) -> Equations:
        """Rows of the system followed by the rows of indirect readings, over all columns."""
        e = self.system.equations
        top = sp.csr_array((e.linear.data, e.linear.indices, e.linear.indptr), shape=(e.shape[0], self.size))
        linear = sp.csr_array(sp.vstack([top, self.meter_rows])) if self.meter_rows.shape[0] else top
        extra = self.meter_rows.shape[0]
        widen = (
            sp.vstack([e.products, sp.csr_array((extra, e.products.shape[1]))])
            if e.pairs.size
            else sp.csr_array((linear.shape[0], 0))
        )
        calls = tuple((sp.csr_array(sp.vstack([f, sp.csr_array((extra, f.shape[1]))])), c) for f, c in e.calls)
        return Equations(linear, np.concatenate([e.rhs, np.zeros(extra)]), sp.csr_array(widen), e.pairs, calls)

    def with_shared(self, base: Array) -> Equations:
        """Return the rows with the shared errors at these values of the readings."""
        if not self.shared:
            return self.equations
        shared = self.shared_part(base)
        key = shared.tobytes()
        if key not in self._latest_shared:
            # One is enough: the steps of a solution ask for the same rows several times, then for the next ones.
            self._latest_shared.clear()
            self._latest_shared[key] = self._rows_with(sp.coo_array(shared))
        return self._latest_shared[key]

    @cached_property
    def _latest_shared(self) -> dict[bytes, Equations]:
        return {}

    def _rows_with(self, part: sp.coo_array) -> Equations:
        """Rows in which each reading holds so much of each shared error."""
        e = self.equations
        rows = self.system.equations.shape[0] + self.row_of_reading[part.row]
        first_cause = self.size - len(self.shared)
        causes = sp.csr_array((-part.data, (rows, first_cause + part.col)), shape=e.linear.shape)
        return Equations(sp.csr_array(e.linear + causes), e.rhs, e.products, e.pairs, e.calls)

    @cached_property
    def row_names(self) -> tuple[str, ...]:
        """Names of all rows."""
        tied = sorted((r, i) for i, r in enumerate(self.row_of_reading) if r >= 0)
        return (*self.system.row_names(), *(f"reading {self.tags[i]}" for _, i in tied))

    # ------------------------------------------------------------------ faults

    @cached_property
    def candidates(self) -> tuple[Candidate, ...]:
        """Every fault that an explanation may name."""
        out = [self._reading_fault(i, r) for i, r in enumerate(self.readings)]
        for block in self.system.blocks:
            if block.fault is None:
                continue
            for j, item in enumerate(block.items):
                out.append(self._domain_fault(block.start + j, item, block.unit, block.fault))
        return tuple(out)

    def _reading_fault(self, i: int, r: Reading) -> Candidate:
        if r.kind == "cause":
            words = ("{item} is off by {size} of its own sigmas", "check what these instruments share: {item}")
        elif r.kind == "prior":
            words = (
                "the stated value of {item} is {direction} by {size} {unit}",
                "measure {item}, or look it up again",
            )
        else:
            words = (
                "{item} reads {direction} by {size} {unit}",
                _second_way(r.unit),
            )
        kind = {"meter": "bias", "prior": "constant", "cause": "shared error"}[r.kind]
        item = r.tag.removeprefix("shared:").removeprefix("known:")
        return Candidate(r.tag, kind, item, r.unit, r.factor, 0, i, -1, *words)

    def _domain_fault(self, column: int, item: str, unit: str, fault: FaultKind) -> Candidate:
        low, high = self.lower[column], self.upper[column]
        side = 1 if low >= 0 else -1 if high <= 0 else 0
        return Candidate(
            self.names[column], fault.kind, item, unit, 1.0, side, -1, column, fault.says, fault.separate, fault.rate
        )

    @cached_property
    def fault_columns(self) -> Ints:
        """Columns of the fault variables, in the order of the candidates behind the readings."""
        return np.array([c.column for c in self.candidates if c.column >= 0], dtype=np.int64)


def _second_way(unit: str) -> str:
    """How a reading is checked by hand; flows can be caught in a bucket, amounts and rates per litre cannot."""
    of_flow = unit.endswith(("/s", "/min", "/h", "/d")) and unit.count("/") == 1 and "mol" not in unit
    return "take a second reading of {item}" + (
        " (bucket and stopwatch, a second meter)" if of_flow else " by another method"
    )


def build_model(
    system: System,
    readings: Sequence[Reading],
    *,
    fixed: Mapping[str, float] | None = None,
    shared: Sequence[SharedError] = (),
    design: Mapping[str, float] | None = None,
) -> Model:
    """Put readings on a system.

    Parameters
    ----------
    system : System
        With all balances written.
    readings : sequence of Reading
        Meters and prior knowledge; domains' priors are added here.
    fixed : mapping of variable name to float, optional
        Exactly known variables, base units; domains' constants are added here.
    shared : sequence of SharedError, optional
    design : mapping of variable name to float, optional
        Expected values, base units, where no reading gives one.

    Returns
    -------
    Model

    Raises
    ------
    KeyError
        If a name is no variable.
    ValueError
        If a variable is both fixed and directly read by a prior.
    """
    known = dict(system.fixed)
    known.update({system.column(n): float(v) for n, v in (fixed or {}).items()})
    for block in system.blocks:
        if block.fault is not None:
            known.update({c: known.get(c, 0.0) for c in range(block.start, block.stop)})
    every = [*readings, *_domain_priors(system, readings)]
    in_group = {t for s in shared for t in s.tags}
    columns: list[int] = []
    indirect: list[int] = []
    taken = set(known)
    for i, r in enumerate(every):
        column = system.column(r.reads[0][0])
        direct = len(r.reads) == 1 and r.reads[0][1] == 1.0 and r.tag not in in_group and column not in taken
        if direct:
            columns.append(column)
            taken.add(column)
        else:
            columns.append(system.size + len(indirect))
            indirect.append(i)
    n = system.size + len(indirect) + len(shared)
    rows, cols, data = [], [], []
    row_of_reading = np.full(len(every) + len(shared), -1, dtype=np.int64)
    for q, i in enumerate(indirect):
        row_of_reading[i] = q
        rows.append(q)
        cols.append(system.size + q)
        data.append(1.0)
        for name, coefficient in every[i].reads:
            rows.append(q)
            cols.append(system.column(name))
            data.append(-coefficient)
    causes = [
        Reading(f"shared:{s.name}", ((f"shared:{s.name}", 1.0),), "sigma", 0.0, 1.0, kind="cause", value=0.0)
        for s in shared
    ]
    columns.extend(range(n - len(shared), n))
    names = (*system.names(), *(f"{every[i].tag}.reading" for i in indirect), *(c.tag for c in causes))
    first_unit = [system.unit(system.column(every[i].reads[0][0])) for i in indirect]
    units = (*(b.unit for b in system.blocks for _ in b.items), *first_unit, *("sigma" for _ in causes))
    return Model(
        system=system,
        names=names,
        units=units,
        readings=(*every, *causes),
        columns=np.array(columns, dtype=np.int64),
        fixed=known,
        shared=tuple(shared),
        meter_rows=sp.csr_array((data, (rows, cols)), shape=(len(indirect), n)),
        row_of_reading=row_of_reading,
        design={system.column(k): float(v) for k, v in (design or {}).items()},
    )


def _domain_priors(system: System, readings: Sequence[Reading]) -> list[Reading]:
    """Priors that domains wrote, unless the case states the same variable itself."""
    stated = {r.reads[0][0] for r in readings if r.kind == "prior" and len(r.reads) == 1}
    out = []
    for prior in system.priors:
        for column, value, sigma in zip(prior.columns, prior.values, prior.sigmas, strict=True):
            name = system.name(int(column))
            if name not in stated and int(column) not in system.fixed:
                out.append(
                    Reading(
                        f"known:{name}",
                        ((name, 1.0),),
                        system.unit(int(column)),
                        0.0,
                        float(sigma),
                        kind="prior",
                        value=float(value),
                        origin=prior.origin,
                    )
                )
    return out
