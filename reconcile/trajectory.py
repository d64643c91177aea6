"""Windows that follow one another, tied by what nodes hold: one answer and one body of evidence for all of them.

The inventory of a node at the start (or end) of each window is a variable; from one window to the next it changes by
the length of the window times the node's rate of accumulation, which the domain's own balance gives. What holds of one
snapshot holds of the whole sequence: parity vector, signatures, tests, explanations.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .accounts import Accounts, explain, explainer_of
from .adjust.sequence import Sequence
from .case.trajectory import TrajectorySpec
from .diagnose.critical import chi2_limit, chi2_p
from .diagnose.sidak import sidak_limit
from .diagnose.tests_of_readings import global_test
from .errors import Notice
from .model import Candidate, Model
from .named import Named
from .results import word_of_evidence

if TYPE_CHECKING:
    import pandas as pd

    from .case.spec import CaseSpec
    from .diagnose.tests_of_readings import GlobalTest

__all__ = ["Trajectory"]

Array = npt.NDArray[np.float64]
Bools = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Trajectory(Named):
    """What a run over a sequence of windows found.

    Attributes
    ----------
    title : str
    model : Model
        Of one window.
    solution : Sequence
        All windows as arrays, base units.
    candidates : tuple of Candidate
        Lasting faults of meters and nodes, then single readings that stand out; columns of `solution.signatures`.
    readings : ndarray, shape (N, number of meters)
        In the unit of each meter; nan where absent.
    base : ndarray, shape (N, k)
        What took part, base units.
    labels : tuple of str
    lengths : ndarray, shape (N,)
        Seconds.
    outer_known : bool
        Whether the length of the window at the open end is known, and with it the inventory beyond it.
    settings, spec, excluded, statuses, cautions, notices, provenance
        As in `Result`.
    """

    title: str
    model: Model
    solution: Sequence
    candidates: tuple[Candidate, ...]
    readings: Array
    base: Array
    labels: tuple[str, ...]
    lengths: Array
    outer_known: bool
    settings: Any
    spec: CaseSpec
    excluded: Mapping[str, str] = field(default_factory=dict)
    statuses: Mapping[tuple[int, str], str] = field(default_factory=dict)
    cautions: tuple[str, ...] = ()
    notices: tuple[Notice, ...] = ()
    provenance: Mapping[str, Any] = field(default_factory=dict)

    # ------------------------------------------------------------------ values

    @property
    def size(self) -> int:
        """Number of windows."""
        return len(self.labels)

    @property
    def trajectory(self) -> TrajectorySpec:
        """What the case says of the sequence."""
        assert self.spec.trajectory is not None
        return self.spec.trajectory

    @cached_property
    def adjusted(self) -> Array:
        """Adjusted values, shape (N, v); nan where they cannot be calculated."""
        shown = self.model.shown
        return np.where(self.solution.determined[:, shown], self.solution.x[:, shown], np.nan)

    @cached_property
    def sigmas(self) -> Array:
        """Their standard uncertainties, all readings of the sequence considered, shape (N, v)."""
        shown = self.model.shown
        spread = np.array([np.linalg.norm(c[shown], axis=1) for c in self.solution.covers])
        return np.where(self.solution.determined[:, shown], spread, np.nan)

    def inventory(self, node: str) -> tuple[Array, Array]:
        """Adjusted inventory of a node (or variable) in each window and its standard uncertainty, shapes (N,)."""
        found = self.trajectory.inventories.get(node)
        j = self.variables.index(node if found is None else found.name)
        return self.adjusted[:, j], self.sigmas[:, j]

    @cached_property
    def outer(self) -> dict[str, tuple[float, float]]:
        """Inventories behind the last window, or before the first where they are read at the end: value and sigma."""
        s = self.solution
        spread = np.linalg.norm(s.outer_cover, axis=1)
        return {
            i.name: (float(s.outer[j]), float(spread[j]))
            for j, i in enumerate(self.trajectory.inventories.values())
            if self.outer_known and s.outer_determined[j]
        }

    def factor(self, window: int) -> Array:
        """Factor F of the covariance of the shown variables of one window, nan where undetermined: cov = F F'."""
        out = self.solution.covers[window][self.model.shown].copy()
        out[~self.solution.determined[window, self.model.shown]] = np.nan
        return out

    def covariance(self, window: int = 0) -> Array:
        """Full covariance of the variables of one window, shape (v, v)."""
        cover = self.factor(window)
        return cover @ cover.T

    # ------------------------------------------------------------------ evidence

    @cached_property
    def test(self) -> GlobalTest:
        """Test of all readings of the sequence together."""
        return global_test(self.solution.parity, self.settings.level)

    @property
    def objective(self) -> float:
        """Sum of squares of the parity vector of the sequence."""
        return self.test.objective

    @property
    def checks(self) -> int:
        """Independent checks in the whole sequence."""
        return self.test.checks

    @cached_property
    def share(self) -> Array:
        """Share of an error of each reading that would show, shape (N, k); 0 where it is absent or not checked."""
        columns, sigma = self.model.columns, self.solution.sigma
        spread = np.array([np.linalg.norm(c[columns], axis=1) for c in self.solution.covers])
        out = np.where(np.isfinite(self.base), 1.0 - (spread / sigma) ** 2, 0.0)
        return np.where(out > 1e-9, out, 0.0)

    @cached_property
    def z(self) -> Array:
        """Test value of each reading in its window, shape (N, k); nan where nothing checks it."""
        off = self.base - self.solution.x[:, self.model.columns]
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(self.share > 0, off / (self.solution.sigma * np.sqrt(self.share)), np.nan)

    @cached_property
    def z_limit(self) -> float:
        """Limit for the largest of all those test values (Šidák); nan without one."""
        count = int(np.isfinite(self.z[:, self.model.meters]).sum())
        return sidak_limit(self.settings.level, count) if count else float("nan")

    @cached_property
    def word(self) -> str:
        """Word of evidence of the sequence; one to watch does not agree where a single reading stands out."""
        word = word_of_evidence(self.checks, self.test.p)
        worst = np.nanmax(np.abs(self.z[:, self.model.meters]), initial=0.0)
        return "does not agree" if word == "watch" and worst > self.z_limit else word

    @cached_property
    def accounts(self) -> Accounts | None:
        """Explanations of the whole sequence; None without checks."""
        f, p = self.solution.signatures, self.solution.parity
        values = np.nan_to_num(self.solution.x).mean(axis=0)[self.model.columns]
        explainer = explainer_of(self.model, f, self.settings, self.spec, candidates=self.candidates, values=values)
        return None if explainer is None else explain(explainer, p, self.model, self.settings.level, self.candidates)

    @cached_property
    def by_window(self) -> tuple[Array, npt.NDArray[np.int64], Array]:
        """What the checks that each window completed add to the objective, their number, and its p-value, each (N,)."""
        s = self.solution
        objective = np.bincount(s.window_of, s.parity**2, minlength=self.size).astype(float)
        checks = np.bincount(s.window_of, minlength=self.size).astype(np.int64)
        p = np.array([chi2_p(o, int(c)) if c else np.nan for o, c in zip(objective, checks, strict=True)])
        return objective, checks, p

    @cached_property
    def limit(self) -> float:
        """Limit of the objective at the level of the case; nan without checks."""
        return chi2_limit(self.settings.level, self.checks) if self.checks else float("nan")

    # ------------------------------------------------------------------ words and tables

    def to_frame(self) -> pd.DataFrame:
        """One tidy table: a row per window and reading, in the unit of the meter.

        Returns
        -------
        pandas.DataFrame
            Columns snapshot, meter, reads, unit, reading, sigma_before, adjusted, sigma, adjustment, share_checked, z.
        """
        import pandas as pd

        model, s = self.model, self.solution
        parts = []
        for j, i in enumerate(model.meters):
            r, column = model.readings[i], model.columns[i]
            scale = abs(r.factor)
            value = (s.x[:, column] - r.offset) / r.factor
            value = np.where(s.determined[:, column], value, np.nan)
            spread = np.array([np.linalg.norm(c[column]) for c in s.covers]) / scale
            given = np.where(np.isfinite(self.base[:, i]), self.readings[:, j], np.nan)
            parts.append(
                pd.DataFrame(
                    {
                        "window": np.arange(self.size),
                        "snapshot": list(self.labels),
                        "meter": r.tag,
                        "reads": " + ".join(n for n, _ in r.reads),
                        "unit": r.unit,
                        "reading": given,
                        "sigma_before": s.sigma[:, i] / scale,
                        "adjusted": value,
                        "sigma": np.where(np.isfinite(value), spread, np.nan),
                        "adjustment": value - given,
                        "share_checked": self.share[:, i],
                        "z": self.z[:, i],
                    }
                )
            )
        if not parts:
            return pd.DataFrame()
        frame = pd.concat(parts, ignore_index=True).sort_values("window", kind="stable", ignore_index=True)
        return frame.drop(columns="window")

    def to_dict(self) -> dict[str, Any]:
        """Return the machine-readable summary; safe for JSON."""
        from .export_trajectory import summary_of_trajectory

        return summary_of_trajectory(self)

    def summary(self) -> str:
        """Return the verdict and the tables as text."""
        from .report.trajectory import render_trajectory

        return render_trajectory(self)

    def __str__(self) -> str:
        return self.summary()
