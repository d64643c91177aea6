"""The whole way: case and readings to a result. The command line and the notebook both call this."""

from __future__ import annotations

import hashlib
import platform
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import numpy.typing as npt

from ._version import __version__
from .adjust.eliminate import dependent_rows
from .adjust.solve import Problem as Snapshot
from .adjust.table import Table
from .assemble import Assembled, assemble
from .bounds import bound_notices, limits_of
from .campaign.adjusted import adjust_prepared, agreement_notices
from .domains import Plugins, load_plugins
from .doubts import doubts_of_readings
from .errors import Problems, did_you_mean
from .readings.table import ReadingsTable
from .refit import decide, problem_of
from .results import Result
from .rivals import rival_notices

if TYPE_CHECKING:
    import pandas as pd

    from .campaign.snapshots import Prepared
    from .coverage import Coverage
    from .model import Model
    from .trajectory import Trajectory

__all__ = ["Case", "load_case"]

Array = npt.NDArray[np.float64]


def load_case(path: str | Path, *, plugins: Sequence[str | Path] = (), modules: Sequence[object] = ()) -> Case:
    """Read and check a case: network, balances, meters; every mistake of the file is reported at once.

    Parameters
    ----------
    path : path
        The case file, or a folder that holds ``case.yaml``.
    plugins : sequence of path
        Plugin files to load beside the installed ones.
    modules : sequence of module or object
        Plugins that are imported already.

    Returns
    -------
    Case

    Raises
    ------
    InputError
        With all problems of the file.
    PluginError
        If a domain failed.
    """
    loaded = load_plugins(plugins, modules=modules)
    file = Path(path)
    if file.is_dir():
        file = file / "case.yaml"
    return Case(assemble(file, loaded), loaded)


@dataclass(frozen=True)
class Case:
    """A checked case, ready to run.

    Attributes
    ----------
    parts : Assembled
    plugins : Plugins
    """

    parts: Assembled
    plugins: Plugins

    @property
    def title(self) -> str:
        """Title of the case."""
        return self.parts.spec.title

    @property
    def model(self) -> Model:
        """The model: columns, rows, readings."""
        return self.parts.model

    @property
    def tags(self) -> tuple[str, ...]:
        """Tags of the meters."""
        return tuple(self.parts.spec.meters)

    def readings_path(self) -> Path | None:
        """File of readings that the case names, or None."""
        named = self.parts.spec.readings
        if named is None:
            return None
        text = named if isinstance(named, str) else str(named.get("file"))
        return self.parts.spec.path.parent / text

    # ------------------------------------------------------------------ run

    def run(
        self,
        readings: str | Path | pd.DataFrame | Mapping[str, Any] | ReadingsTable | None = None,
        *,
        exclude: Mapping[str, str] | None = None,
        suspects: Literal["flag", "exclude", "compensate"] = "flag",
        **settings: Any,
    ) -> Result:
        """Adjust readings, test them, and look for explanations.

        Parameters
        ----------
        readings : path, DataFrame, mapping of tag to value(s), or ReadingsTable, optional
            A column a meter, a row a snapshot; what the case names when left out.
        exclude : mapping of tag to reason, optional
            Meters to leave out; each needs a reason, which stands in the result.
        suspects : {"flag", "exclude", "compensate"}
            What the adjusted values do about a suspect where the evidence names one explanation; see `decide`.
        **settings
            Settings of the case to replace: level, power, max_faults, ...

        Returns
        -------
        Result

        Raises
        ------
        InputError
            If the readings do not fit the case.
        """
        prepared = self.prepare(readings)
        table = prepared.table
        left_out = self._excluded(exclude or {})
        values = np.where(table.usable, table.values, np.nan)
        column = {t: i for i, t in enumerate(table.columns)}
        picked = values[:, [column[t] for t in self.tags]]
        picked[:, [self.tags.index(t) for t in left_out]] = np.nan
        base = self.model.to_base(picked)
        spec = self.parts.spec
        chosen = replace(spec.settings, **settings) if settings else spec.settings
        adjusted = adjust_prepared(self, prepared, base, chosen)
        self._refuse_contradictions(adjusted)
        labels = tuple(table.label(i) for i in range(len(table)))
        result = Result(
            title=self.title,
            model=self.model,
            table=adjusted,
            readings=values[:, [column[t] for t in self.tags]],
            labels=labels,
            settings=chosen,
            spec=spec,
            excluded=left_out,
            statuses={
                (i, table.columns[j]): table.reason(i, j) for i, j in zip(*np.nonzero(~table.usable), strict=True)
            },
            figures=spec.figures,
            cautions=self.parts.cautions,
            notices=(
                *self.parts.notices,
                *table.notices,
                *doubts_of_readings(self.model, self.parts.network, picked),
                *agreement_notices(adjusted),
                *bound_notices(adjusted, self.model, spec),
                *rival_notices(adjusted, self.model, labels),
            ),
            provenance=self._provenance(table, chosen, suspects),
            prepared=prepared,
        )
        return result if suspects == "flag" else decide(result, suspects)

    def run_trajectory(self, readings: Any = None, *, exclude: Mapping[str, str] | None = None) -> Trajectory:
        """Adjust windows that inventories tie, as one system; see `reconcile.trajectory_run`."""
        from .trajectory_run import run_trajectory

        return run_trajectory(self, readings, exclude=exclude)

    def read(self, readings: Any = None) -> ReadingsTable:
        """Read the log as it stands, and check that its columns fit the meters; see `run`."""
        from .campaign.source import read_log

        return read_log(self.parts.spec, readings, self._readers())

    def prepare(self, readings: Any = None) -> Prepared:
        """Turn the log into snapshots as the case says: windows, counters, levels, laboratory values; see `run`."""
        from .campaign.prepare import prepare
        from .campaign.source import plan_of, read_samples

        spec, table = self.parts.spec, self.read(readings)
        samples = read_samples(spec, table, self._readers())
        plan = plan_of(spec)
        units = {t: m.unit if (stated := plan.of(t).column_unit) is None else stated for t, m in spec.meters.items()}
        held: tuple[str, ...] = ()
        at_end = False
        if spec.trajectory is not None:
            from .campaign.tied import keep_moving

            held, at_end = spec.trajectory.held(spec.meters), spec.trajectory.at_end
            plan = keep_moving(plan, linear=self.model.equations.is_linear)
        return prepare(
            plan, table, self.tags, lab=samples, units=units, file=str(spec.path), held=held, held_at_end=at_end
        )

    def _readers(self) -> dict[str, Any]:
        """Readers of measured data that plugins offer, by suffix or scheme."""
        return {k: v for _, offered in self.plugins.each("reconcile_sources") for k, v in offered.items()}

    def _excluded(self, exclude: Mapping[str, str]) -> dict[str, str]:
        problems = Problems(str(self.parts.spec.path))
        for tag, because in exclude.items():
            if tag not in self.tags:
                problems.add(
                    "unknown-meter", f"{tag!r} cannot be left out: no such meter", did_you_mean(tag, self.tags)
                )
            elif not str(because or "").strip():
                problems.add(
                    "no-reason",
                    f"{tag} left out without a reason",
                    'give one with --because "..."; it will stand in the result',
                )
        problems.raise_if_any()
        return dict(exclude)

    def problem(self, settings: Any = None) -> Snapshot:
        """Return what all snapshots share, as arrays."""
        problem = problem_of(self.model, settings or self.parts.spec.settings)
        lower, upper = problem.lower.copy(), problem.upper.copy()
        for column, (low, high) in limits_of(self.model, self.parts.spec).items():
            lower[column], upper[column] = low, high
        return replace(problem, lower=lower, upper=upper)

    def name_of_column(self, column: int) -> str:
        """Return the name of a column."""
        return self.model.names[column]

    def name_of_row(self, row: int) -> str:
        """Return the name of a row."""
        return self.model.row_names[row]

    # ------------------------------------------------------------------ what must be said

    def _refuse_contradictions(self, table: Table) -> None:
        """Constants that contradict each other through the balances cannot be adjusted away."""
        model = self.model
        fixed = np.array(sorted(model.fixed), dtype=np.int64)
        faults = set(model.fault_columns.tolist())
        live = np.array([c for c in range(model.size) if c not in model.fixed], dtype=np.int64)
        for group in table.groups[:1]:
            implied = dependent_rows(group.jacobian[:, live])
            x = group.x[0]
            rhs = group.jacobian @ x - group.equations.closure(x)
            known = rhs - group.jacobian[:, fixed] @ x[fixed]
            size = np.abs(implied) @ np.maximum(np.abs(known), np.abs(group.jacobian) @ np.abs(np.nan_to_num(x)))
            off = np.abs(implied @ known) > 1e-9 * np.maximum(size, 1e-300)
            problems = Problems(str(self.parts.spec.path))
            for combination, wrong in zip(implied, off, strict=True):
                if not wrong:
                    continue
                rows = [self.name_of_row(int(r)) for r in np.flatnonzero(combination)]
                touched = np.flatnonzero(np.abs(group.jacobian[np.flatnonzero(combination)][:, fixed]).sum(axis=0))
                names = [model.names[fixed[t]] for t in touched if int(fixed[t]) not in faults]
                problems.add(
                    "contradictory-constants",
                    f"balances {', '.join(rows)} cannot hold together"
                    + (f" with the exact values of {', '.join(names)}" if names else ""),
                    "give one of the constants a sigma, or correct it",
                )
            problems.raise_if_any()

    def _provenance(self, table: ReadingsTable, settings: Any, suspects: str) -> dict[str, Any]:
        spec = self.parts.spec
        used = {name: self.plugins.domains[name].domain.version for name in spec.domains}
        libraries = {}
        for name in ("numpy", "scipy", "pandas"):
            try:
                libraries[name] = version(name)
            except PackageNotFoundError:  # pragma: no cover - installed by the package itself
                continue
        return {
            "program": f"reconcile-flows {__version__}",
            "python": platform.python_version(),
            "libraries": libraries,
            "domains": used,
            "case": spec.path.name,
            "case_sha256": hashlib.sha256(spec.path.read_bytes()).hexdigest(),
            "suspects": suspects,
            "readings_sha256": table.source_hash,
        }

    # ------------------------------------------------------------------ before any reading

    @cached_property
    def coverage(self) -> Coverage:
        """What can be known with these meters, before any reading."""
        from .coverage import coverage_of

        return coverage_of(self)
