"""Results: frozen, with names and units; every number the program prints or writes comes from here."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .adjust.table import Group, Table
from .diagnose.critical import chi2_limit, chi2_p
from .errors import Notice
from .model import Model
from .named import Named

if TYPE_CHECKING:
    import pandas as pd

    from .campaign.snapshots import Prepared
    from .case.spec import CaseSpec
    from .diagnose.explain import Explainer
    from .figures import FigureValue
    from .history import History
    from .refit import Decision, Granted
    from .snapshot import Snapshot

__all__ = ["CLASSES", "Result", "word_of_evidence"]

Array = npt.NDArray[np.float64]

CLASSES = ("checked", "not checked", "calculated", "cannot be calculated", "known")
"""Classes of a variable: measured and redundant, measured and not, unmeasured and observable or not, given."""


def word_of_evidence(checks: int, p: float) -> str:
    """One of four words for how well a snapshot's readings agree.

    Parameters
    ----------
    checks : int
        Independent checks; 0 gives ``cannot tell``.
    p : float
        p-value of the objective.

    Returns
    -------
    str
        ``agrees``, ``watch`` (between 95 and 99.9 %), ``does not agree`` (beyond) or ``cannot tell``.
    """
    if checks == 0 or not np.isfinite(p):
        return "cannot tell"
    return "agrees" if p >= 0.05 else "watch" if p >= 0.001 else "does not agree"


@dataclass(frozen=True)
class Result(Named):
    """What a run found, for one snapshot or many.

    Attributes
    ----------
    title : str
    model : Model
    table : Table
        Adjusted snapshots as arrays, base units.
    readings : ndarray, shape (N, number of meters)
        As they were given, in the unit of each meter; nan where absent.
    labels : tuple of str
        One per snapshot.
    settings : object
        Level, power and priors of the case.
    excluded : mapping of str to str
        Meters that were left out, and why.
    statuses : mapping of (snapshot, tag) to str
        Why a reading was not used, where it was not simply missing.
    figures : mapping of str to str
        Derived values asked for.
    decisions : mapping of int to Decision
        Snapshots whose adjusted values were computed with a suspect granted, and what was decided.
    cautions, notices : tuple
        What has to be said with the result.
    provenance : mapping
        Versions, options and hashes of the inputs.
    prepared : Prepared or None
        How the log became these snapshots; None for readings that were solved again under another assumption.
    """

    title: str
    model: Model
    table: Table
    readings: Array
    labels: tuple[str, ...]
    settings: Any
    spec: CaseSpec | None = None
    excluded: Mapping[str, str] = field(default_factory=dict)
    statuses: Mapping[tuple[int, str], str] = field(default_factory=dict)
    figures: Mapping[str, str] = field(default_factory=dict)
    decisions: Mapping[int, Decision] = field(default_factory=dict)
    cautions: tuple[str, ...] = ()
    notices: tuple[Notice, ...] = ()
    provenance: Mapping[str, Any] = field(default_factory=dict)
    prepared: Prepared | None = None
    _explainers: dict[tuple[int, int | None], Explainer | None] = field(default_factory=dict, repr=False, compare=False)
    _models: dict[int, Model] = field(default_factory=dict, repr=False, compare=False)
    _looked_at: dict[int, Snapshot] = field(default_factory=dict, repr=False, compare=False)
    _granted: dict[tuple[int, tuple[tuple[str, float], ...]], Granted | None] = field(
        default_factory=dict, repr=False, compare=False
    )

    def model_of(self, index: int) -> Model:
        """Model of one snapshot: its meters with the sigmas that they have there, its line-up."""
        if self.prepared is None:
            return self.model
        if index not in self._models:
            from .campaign.adjusted import model_of

            self._models[index] = model_of(self.model, self.prepared, index)
        return self._models[index]

    # ------------------------------------------------------------------ arrays

    @property
    def size(self) -> int:
        """Number of snapshots."""
        return self.table.size

    def _spread(self, of_group: Any, width: int | None = None) -> Array:
        out = np.full((self.size, width) if width is not None else self.size, np.nan)
        for group in self.table.groups:
            out[group.rows] = of_group(group)
        out.setflags(write=False)
        return out

    def _decided(self, values: Array, of_group: Any) -> Array:
        """Replace the rows of snapshots in which a suspect was granted."""
        if not self.decisions:
            return values
        out = values.copy()
        for i, decision in self.decisions.items():
            out[i] = of_group(decision.granted.group)
        out.setflags(write=False)
        return out

    @cached_property
    def adjusted(self) -> Array:
        """Adjusted values of the variables, shape (N, v); nan where they cannot be calculated."""
        shown = self.model.shown
        out = self._spread(lambda g: np.where(g.determined[shown], g.x[:, shown], np.nan), shown.size)
        return self._decided(out, lambda g: np.where(g.determined[shown], g.x[0, shown], np.nan))

    @cached_property
    def sigmas(self) -> Array:
        """Their standard uncertainties, shape (N, v)."""
        shown = self.model.shown
        out = self._spread(lambda g: np.linalg.norm(g.cover[shown], axis=1), shown.size)
        return self._decided(out, lambda g: np.linalg.norm(g.cover[shown], axis=1))

    @cached_property
    def objective(self) -> Array:
        """Sum of squares of the parity vector, shape (N,)."""
        return self._spread(lambda g: (g.parity**2).sum(axis=1))

    @cached_property
    def checks(self) -> npt.NDArray[np.int64]:
        """Independent checks of each snapshot, shape (N,); 0 where it could not be adjusted."""
        return np.nan_to_num(self._spread(lambda g: float(g.checks))).astype(np.int64)

    @cached_property
    def p_value(self) -> Array:
        """Probability of a larger objective when nothing is wrong, shape (N,); nan without checks."""
        return np.array(
            [chi2_p(o, int(c)) if c > 0 else np.nan for o, c in zip(self.objective, self.checks, strict=True)]
        )

    @cached_property
    def limit(self) -> Array:
        """Limit of the objective at the level of the case, shape (N,); nan without checks."""
        level = self.settings.level
        known = {int(c): chi2_limit(level, int(c)) if c > 0 else np.nan for c in np.unique(self.checks)}
        return np.array([known[int(c)] for c in self.checks])

    @cached_property
    def words(self) -> tuple[str, ...]:
        """Word of evidence of each snapshot; one that a corrected test of a reading names does not agree."""
        words = [word_of_evidence(int(c), p) for c, p in zip(self.checks, self.p_value, strict=True)]
        for i in [i for i, w in enumerate(words) if w == "watch"]:
            words[i] = self.snapshot(i).word
        return tuple(words)

    @cached_property
    def suspicious(self) -> npt.NDArray[np.bool_]:
        """Whether each snapshot's readings disagree at the level of the case."""
        with np.errstate(invalid="ignore"):
            return self.objective > self.limit

    def classes(self, snapshot: int) -> tuple[str, ...]:
        """Class of each variable in one snapshot, see `CLASSES`."""
        return classes_of(self.model_of(snapshot), self.group(snapshot))

    def group(self, snapshot: int) -> Group:
        """Linearisation that a snapshot belongs to.

        Raises
        ------
        SolveError
            If no consistent answer was found for this snapshot.
        """
        g = int(self.table.group_of[snapshot])
        if g < 0:
            raise self.table.failed[snapshot]
        return self.table.groups[g]

    def covariance(self, snapshot: int = 0) -> Array:
        """Full covariance of the adjusted variables, shape (v, v); nan where they cannot be calculated."""
        cover = self.final_group(snapshot).cover[self.model.shown]
        return cover @ cover.T

    def final_group(self, snapshot: int) -> Group:
        """Linearisation that the exported values of a snapshot come from, a granted suspect considered."""
        decision = self.decisions.get(snapshot)
        return self.group(snapshot) if decision is None else decision.granted.group

    # ------------------------------------------------------------------ detail and words

    def snapshot(self, index: int = 0) -> Snapshot:
        """Return one snapshot in detail: tests, fault sizes, explanations.

        Parameters
        ----------
        index : int
            Counted from 0.
        """
        if not 0 <= index < self.size:
            raise IndexError(f"there are {self.size} snapshots, counted from 0; got {index}")
        if index not in self._looked_at:
            from .snapshot import look

            self._looked_at[index] = look(self, index)
        return self._looked_at[index]

    def explainer(self, index: int, most: int | None = None) -> Explainer | None:
        """Return the prepared search for explanations that a snapshot uses; None without checks.

        Parameters
        ----------
        index : int
            Snapshot, counted from 0.
        most : int, optional
            Most faults at once; what the case says when left out.
        """
        key = (int(self.table.group_of[index]), most)
        if key not in self._explainers:
            from .accounts import explainer_of
            from .snapshot import signatures

            group = self.group(index)
            shifts, values = signatures(self.model, group), group.x[0][self.model.columns]
            self._explainers[key] = explainer_of(self.model, shifts, self.settings, self.spec, most, values=values)
        return self._explainers[key]

    def figure_values(self, index: int = 0) -> tuple[FigureValue, ...]:
        """Return the derived values of the case for one snapshot, with uncertainties and shares."""
        from .figures import evaluate

        decision = self.decisions.get(index)
        source, row = (self, index) if decision is None else (decision.granted.result, 0)
        return tuple(evaluate(name, text, source, row) for name, text in self.figures.items())

    @cached_property
    def history(self) -> History:
        """What all snapshots say together."""
        from .history import History

        return History(self)

    def to_frame(self) -> pd.DataFrame:
        """One tidy table: a row per snapshot and reading, and per variable that is not read.

        Returns
        -------
        pandas.DataFrame
            Columns snapshot, variable, unit, meter, class, reading, sigma_before, adjusted, sigma, adjustment,
            adjustment_in_sigmas, share_checked, smallest_detectable.
        """
        import pandas as pd

        from .snapshot_lines import FRAME_COLUMNS

        rows = [row for i in range(self.size) if i not in self.table.failed for row in self.snapshot(i).frame_rows()]
        return pd.DataFrame(rows, columns=list(FRAME_COLUMNS))

    def summary(self) -> str:
        """Return the verdict and the tables as text."""
        from .report.text import render

        return render(self)

    def to_dict(self) -> dict[str, Any]:
        """Return the machine-readable summary; safe for JSON."""
        from .export import summary_of

        return summary_of(self)

    def _repr_html_(self) -> str:
        from .report.notebook import render_html

        return render_html(self)

    def __str__(self) -> str:
        return self.summary()


def classes_of(model: Model, group: Group) -> tuple[str, ...]:
    """Class of each shown variable for one linearisation, see `CLASSES`."""
    read: dict[str, bool] = {}
    absent = set(group.absent.tolist())
    for i, r in enumerate(model.readings):
        if r.kind == "cause" or i in absent or len(r.reads) != 1:
            continue
        name = r.reads[0][0]
        read[name] = read.get(name, False) or bool(group.checked[i])
    out = []
    for c in model.shown:
        name = model.names[c]
        if int(c) in model.fixed:
            out.append("known")
        elif name in read:
            out.append("checked" if read[name] else "not checked")
        else:
            out.append("calculated" if group.determined[c] else "cannot be calculated")
    return tuple(out)
