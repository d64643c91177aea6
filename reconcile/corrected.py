"""The corrected data set read back: tables with their texts as texts, covariance, and propagation in one call."""

from __future__ import annotations

import json
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from .errors import InputError, Problem, SolveError
from .export import fingerprint

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Corrected", "load_corrected"]

Array = npt.NDArray[np.float64]

TABLES = ("adjusted", "sigmas", "variables", "evidence", "suspects", "balances", "figures")


@dataclass(frozen=True)
class Corrected:
    """A corrected data set that was read back.

    Attributes
    ----------
    adjusted, sigmas, variables, evidence, suspects, balances, figures : DataFrame
    summary : dict
    readings, log, intervals : DataFrame or None
        Of a data set that comes from a log: every cell with its status, every decision, every interval.
    """

    adjusted: pd.DataFrame
    sigmas: pd.DataFrame
    variables: pd.DataFrame
    evidence: pd.DataFrame
    suspects: pd.DataFrame
    balances: pd.DataFrame
    figures: pd.DataFrame
    summary: dict[str, Any]
    _names: tuple[str, ...]
    _factors: tuple[Array, ...]
    _group_of: npt.NDArray[np.int64]
    readings: pd.DataFrame | None = None
    log: pd.DataFrame | None = None
    intervals: pd.DataFrame | None = None

    def covariance(self, snapshot: int = 0) -> pd.DataFrame:
        """Full covariance of the variables of one snapshot, with names."""
        import pandas as pd

        group = int(self._group_of[snapshot])
        if group == -2:
            raise SolveError(
                f"the covariance of snapshot {snapshot} was not kept: too few snapshots have its pattern of absent readings",
                code="covariance-not-kept",
                hint="run it on its own",
            )
        if group < 0:
            raise SolveError(f"snapshot {snapshot} was not adjusted", code="not-adjusted")
        factor = self._factors[group]
        return pd.DataFrame(factor @ factor.T, index=list(self._names), columns=list(self._names))

    def propagate(self, formula: str, snapshot: int = 0) -> tuple[float, float]:
        """Value and standard uncertainty of arithmetic over the variables, with the full covariance.

        Parameters
        ----------
        formula : str
            E.g. ``permeate.flow / feed.flow``.
        snapshot : int
            Counted from 0.

        Returns
        -------
        value, sigma : float
        """
        from .figures import parse_figure

        figure = parse_figure(formula)
        row = self.adjusted.iloc[snapshot]
        value, slopes = figure.value({n: float(row[n]) for n in figure.names})
        cov = self.covariance(snapshot).loc[list(slopes), list(slopes)].to_numpy()
        g = np.array(list(slopes.values()))
        return value, float(np.sqrt(g @ cov @ g))


def load_corrected(folder: str | Path) -> Corrected:
    """Read a corrected data set back, covariance included.

    Parameters
    ----------
    folder : path
        What ``run --out`` wrote.

    Returns
    -------
    Corrected

    Raises
    ------
    InputError
        If a file is missing or does not fit the description beside it.
    """
    import pandas as pd

    base = Path(folder)
    description = base / "datapackage.json"
    if not description.is_file():
        raise InputError(
            Problem("no-data-set", f"{str(base)!r} holds no datapackage.json", "name the folder that run --out wrote")
        )
    package = json.loads(description.read_text("utf-8"))
    for resource in package["resources"]:
        path = base / resource["path"]
        if not path.is_file() or fingerprint(path)["hash"] != resource["hash"]:
            raise InputError(
                Problem(
                    "data-set-changed",
                    f"{str(path)!r} is missing or was changed after it was written",
                    "run the case again, or restore the file",
                )
            )
    # Before its version 3, pandas read the last digit of a number exactly only when asked to.
    exact: dict[str, Any] = {"float_precision": "round_trip"} if int(pd.__version__.split(".")[0]) < 3 else {}
    texts = {
        r["path"]: [f["name"] for f in r["schema"]["fields"] if f["type"] == "string"]
        for r in package["resources"]
        if "schema" in r
    }
    read = {}
    for stem in (*TABLES, *(t for t in ("readings", "log", "intervals") if f"{t}.csv" in texts)):
        columns = texts[f"{stem}.csv"]
        frame = pd.read_csv(base / f"{stem}.csv", dtype=dict.fromkeys(columns, str), **exact)
        # An empty text is a text: nothing was decided, no reason was needed.
        read[stem] = frame.assign(**{c: frame[c].fillna("") for c in columns})
    with np.load(base / "covariance.npz") as arrays:
        names = tuple(str(n) for n in arrays["variables"])
        group_of = arrays["group_of_snapshot"]
        factors = tuple(arrays[f"factor_{g}"] for g in range(int(group_of.max(initial=-1)) + 1))
    summary = json.loads((base / "summary.json").read_text("utf-8"))
    return Corrected(**read, summary=summary, _names=names, _factors=factors, _group_of=group_of)
