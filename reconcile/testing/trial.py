"""Conformance files: an ordinary case, one exact state of it, and what the author promises about its balances."""

from __future__ import annotations

import copy
import json
import shutil
import tempfile
import weakref
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from types import ModuleType
from typing import TYPE_CHECKING, Any

from pydantic import BaseModel, ConfigDict, Field

from ..case.validate import validated
from ..case.yaml_source import read_yaml
from ..domains import Plugins, load_plugins
from ..errors import InputError, Location, Problem, Problems
from ..hookspecs import Domain, hookimpl

if TYPE_CHECKING:
    from ..run import Case

__all__ = ["Refused", "Trial", "host", "merged", "read_trial"]


class Refused(BaseModel):
    """A change of the case that the domain must refuse, and words that its message must hold."""

    model_config = ConfigDict(extra="forbid")
    change: dict[str, Any] = Field(description="Put over the case, block by block; null removes a key")
    says: list[str] = Field(min_length=1, description="Words of the message: what is wrong, and where")


class _File(BaseModel):
    model_config = ConfigDict(extra="forbid")
    conformance: int = Field(description="Version of this format: 1")
    domain: str = Field(description="Name of the domain that is on trial")
    case: str | dict[str, Any] = Field(description="The case, or the name of its file")
    truth: dict[str, str | float] = Field(
        description="One exact state, worked out by hand; what is not stated is calculated from the balances"
    )
    inflows: dict[str, list[str]] = Field(
        default_factory=dict,
        description="By balance: what flows in, a variable or a product 'a.flow * a.urea'; with a number in front, so much of it",
    )
    in_other_units: list[dict[str, Any]] = Field(
        default_factory=list, description="Options of the domains that change units and nothing else"
    )
    dependent: list[str] = Field(default_factory=list, description="Balances that follow from the others")
    refused: list[Refused] = Field(default_factory=list, description="Cases that the domain must refuse")


@dataclass(frozen=True)
class Trial:
    """One conformance file, ready to be built in any variant.

    Attributes
    ----------
    path : pathlib.Path
    domain : str
    case : dict
        Plain data of the case, without its readings.
    truth : dict of str to str or float
        Text with a unit, or a number in the unit of the variable.
    inflows : dict of str to list of str
    in_other_units : list of dict
        Each put over the case's ``domains``.
    dependent : list of str
    refused : list of Refused
    plugins : Plugins
    """

    path: Path
    domain: str
    case: dict[str, Any]
    truth: dict[str, str | float]
    inflows: dict[str, list[str]]
    in_other_units: list[dict[str, Any]]
    dependent: list[str]
    refused: list[Refused]
    plugins: Plugins

    def load(self, case: Mapping[str, Any] | None = None) -> Case:
        """Build the case, or a variant of it, as the program does from a file."""
        from ..assemble import assemble
        from ..run import Case

        file = self._folder / self.path.with_suffix(".case.yaml").name
        # JSON is YAML, and says every text as a text.
        file.write_text(json.dumps(self.case if case is None else case, indent=1), encoding="utf-8")
        return Case(assemble(file, self.plugins), self.plugins)

    @cached_property
    def _folder(self) -> Path:
        """Where variants of the case are written; gone with the trial."""
        folder = tempfile.mkdtemp(prefix="conformance-")
        weakref.finalize(self, shutil.rmtree, folder, ignore_errors=True)
        return Path(folder)

    def with_domains(self, change: Mapping[str, Any]) -> dict[str, Any]:
        """Plain data of the case with other options of its domains."""
        return merged(self.case, {"domains": dict(change)})


def merged(base: Mapping[str, Any], change: Mapping[str, Any]) -> dict[str, Any]:
    """Put a change over plain data, block by block; None removes a key."""
    out = copy.deepcopy(dict(base))
    for key, value in change.items():
        if value is None:
            out.pop(key, None)
        elif isinstance(value, Mapping) and isinstance(out.get(key), Mapping):
            out[key] = merged(out[key], value)
        else:
            out[key] = copy.deepcopy(value)
    return out


def host(domain: type[Domain], plugin: ModuleType | None = None) -> Plugins:
    """Load the installed plugins and, where it is not among them, the domain that is on trial.

    Parameters
    ----------
    domain : type of Domain
    plugin : module, optional
        The plugin that offers it.

    Raises
    ------
    PluginError
        If the domain cannot be loaded.
    """
    found = load_plugins()
    known = found.domains.get(domain.name)
    if known is not None and type(known.domain) is domain:
        return found
    return load_plugins(modules=[plugin or _offering(domain)])


def _offering(domain: type[Domain]) -> ModuleType:
    module = ModuleType(f"{domain.__module__.split('.')[0]}_on_trial")

    @hookimpl
    def reconcile_domains() -> list[type[Domain]]:
        return [domain]

    module.reconcile_domains = reconcile_domains  # type: ignore[attr-defined]
    return module


def read_trial(path: str | Path, plugins: Plugins) -> Trial:
    """Read a conformance file.

    Parameters
    ----------
    path : path
    plugins : Plugins
        With the domain that is on trial.

    Returns
    -------
    Trial

    Raises
    ------
    InputError
        With every problem of the file.
    """
    file = Path(path)
    problems = Problems(str(file))
    data, places = read_yaml(file, problems)
    if not isinstance(data, dict):
        raise InputError(
            Problem(
                "not-a-trial",
                "a conformance file is a block of keys",
                "start with 'conformance: 1', then domain, case and truth",
                Location(str(file)),
            )
        )
    stated = validated(_File, data, path=(), owner="conformance file", places=places, problems=problems)
    problems.raise_if_any()
    assert stated is not None
    if stated.conformance != 1:
        problems.add(
            "format-unknown", f"conformance format {stated.conformance} is not known", "write conformance: 1",
            places.where(("conformance",)),
        )  # fmt: skip
    if stated.domain not in plugins.domains:
        plugins.domain(stated.domain)
    case = stated.case
    if isinstance(case, str):
        case, _ = read_yaml(file.parent / case, problems)
    if not isinstance(case, dict):
        problems.add(
            "not-a-case", f"{stated.case!r} is no case: a case is a block of keys", "", places.where(("case",))
        )
    problems.raise_if_any()
    case = {k: v for k, v in case.items() if k != "readings"}
    return Trial(
        file, stated.domain, case, stated.truth, stated.inflows, stated.in_other_units, stated.dependent,
        stated.refused, plugins,
    )  # fmt: skip
