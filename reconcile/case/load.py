"""Reads a case file: all its mistakes at once, each at its place, or one frozen `CaseSpec`."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path as FilePath
from typing import TYPE_CHECKING, Any

from ..errors import InputError, Location, Problem, Problems, did_you_mean
from .calibrations import read_calibrations
from .models import CaseModel, KnownModel, MeterModel, SettingsModel
from .needs import refuse_older
from .places import Places
from .quantities import Refusal, read_bound, read_quantity, read_span, read_unit
from .reads import read_reads, unquoted
from .shared import read_shared_errors
from .sigma import read_sigma
from .spec import CaseSpec, DomainModels, KnownSpec, MeterSpec, Settings
from .streams import OptionReader, read_nodes, read_streams
from .tables import read_table
from .trajectory import read_trajectory
from .unfilled import refuse_unfilled
from .validate import keys_of, validated
from .yaml_source import read_yaml

if TYPE_CHECKING:
    from ..campaign.spec import CampaignSpec

__all__ = ["read_case", "read_what_stands"]

_METER_OPTIONS = ("description", "fault_rate", "reading")


def read_case(path: str | FilePath, *, option_models: Mapping[str, DomainModels] | None = None) -> CaseSpec:
    """Read and check a case file; see `read_what_stands`, which goes on where this raises.

    Returns
    -------
    CaseSpec

    Raises
    ------
    InputError
        With all problems of the file.
    """
    problems = Problems(str(path))
    spec = read_what_stands(path, problems, option_models=option_models)
    problems.raise_if_any()
    if spec is None:  # pragma: no cover - whatever is refused has a problem
        raise InputError(Problem("case-refused", "the case could not be read", where=Location(str(path))))
    return spec


def read_what_stands(
    path: str | FilePath, problems: Problems, *, option_models: Mapping[str, DomainModels] | None = None
) -> CaseSpec | None:
    """Read a case file, and return what can be used of it even where something is wrong.

    Parameters
    ----------
    path : path
        The YAML file.
    problems : Problems
        Takes whatever is wrong.
    option_models : mapping of domain name to DomainModels, optional
        The installed domains; without it, what belongs to domains is taken as it stands.

    Returns
    -------
    CaseSpec or None
        Without the entries that were refused; None where domains, streams or nodes are not right, since nothing
        can be built on those.

    Raises
    ------
    InputError
        If the file is no YAML, or no case at all.
    MissingExtra
        If a table is a spreadsheet and the library that reads it is not installed.
    """
    data, places = read_yaml(path, problems)
    if not isinstance(data, dict):
        problems.add(
            "not-a-case",
            "a case file is a block of keys",
            "start with 'reconcile: 1', then domains, streams and meters",
            places.where(()),
        )
        problems.raise_if_any()
    refuse_unfilled(data, places, problems)
    _version(data, places, problems)
    if "reconcile" not in data:
        # Told above in its own words.
        data = {"reconcile": 1, **data}
    top = validated(CaseModel, data, path=(), owner="the case", places=places, problems=problems)
    reader = _CaseReader(FilePath(path), data, places, problems, option_models)
    spec = reader.read()
    return None if top is None else spec


def _version(data: Mapping[str, Any], places: Places, problems: Problems) -> None:
    if "reconcile" not in data:
        problems.add(
            "version-missing",
            "the case does not say which version of the format it is written in",
            "begin the file with 'reconcile: 1'",
            Location(places.file, 1, 1),
        )
    elif places.text(("reconcile",), data["reconcile"]) != "1" or isinstance(data["reconcile"], bool):
        problems.add(
            "version-unknown",
            f"version {places.text(('reconcile',), data['reconcile'])!r} of the case format is not known",
            "write 'reconcile: 1', or use the release of this program that wrote the case",
            places.where(("reconcile",)),
        )


class _CaseReader:
    """Reads the blocks of one case, in the order in which they need each other."""

    def __init__(
        self,
        path: FilePath,
        data: dict[str, Any],
        places: Places,
        problems: Problems,
        models: Mapping[str, DomainModels] | None,
    ) -> None:
        self.path, self.data, self.places, self.problems, self.models = path, data, places, problems, models

    def read(self) -> CaseSpec | None:
        """Return the case; whatever was wrong stands in the problems."""
        domains = self._domains()
        refuse_older(self._block("needs"), domains, self.models, self.places, self.problems)
        options = OptionReader(tuple(domains), self.models, self.places, self.problems)
        raw_streams = self._table("streams", ("name", "stream"), ("path", "source", "target", *options.keys("stream")),
                                  any_key=options.open_ended("stream"))  # fmt: skip
        streams = read_streams(raw_streams, options)
        wanted = self.models is None or any(self.models[d].needs_streams for d in domains if d in self.models)
        if wanted and not raw_streams and "streams" in self.data and isinstance(self.data["streams"], dict):
            self.problems.add(
                "no-streams",
                "the case has no streams",
                "write name: a -> b lines",
                self.places.where(("streams",), key=True),
            )
        nodes = read_nodes(self._block("nodes"), streams, options, complete=len(streams) == len(raw_streams))
        sound = not self.problems
        raw_meters = self._table("meters", ("tag", "name"), tuple(keys_of(MeterModel)), any_key=False)
        meters = {t: m for t, v in raw_meters.items() if (m := self._meter(t, v)) is not None}
        known = {k.variable: k for n, v in self._block("known").items() if (k := self._known(n, v)) is not None}
        shared = read_shared_errors(self._block("shared_errors"), meters, tuple(raw_meters), self.places, self.problems)
        bounds = self._each("bounds", lambda v, owner: read_bound(v, owner))
        design = self._each("design", lambda v, owner: read_quantity(v, owner, "30 L/min"))
        figures = self._figures()
        readings = self._readings()
        settings = self._settings()
        campaign = self._campaign(meters, tuple(raw_meters), tuple(raw_streams))
        trajectory = read_trajectory(
            self.data.get("trajectory"), meters, tuple(raw_meters), known, self.places, self.problems
        )
        if not sound:
            return None
        return CaseSpec(
            title=str(self.data.get("title") or ""),
            path=self.path,
            domains=domains,
            nodes=nodes,
            streams=streams,
            meters=meters,
            known=known,
            shared_errors=shared,
            bounds=bounds,
            design=design,
            figures=figures,
            readings=readings,
            settings=settings,
            where=self.places.where,
            campaign=campaign,
            trajectory=trajectory,
        )

    def _block(self, section: str) -> dict[str, Any]:
        """A block of the case; one of the wrong type has been told by the model already."""
        value = self.data.get(section)
        return value if isinstance(value, dict) else {}

    def _table(self, section: str, names: tuple[str, ...], keys: tuple[str, ...], *, any_key: bool) -> dict[str, Any]:
        value = self.data.get(section)
        if not isinstance(value, str):
            return self._block(section)
        found = read_table(
            section,
            value,
            self.path.parent,
            names=names,
            keys=keys,
            any_key=any_key,
            places=self.places,
            problems=self.problems,
        )
        return found or {}

    def _refused(self, refused: Refusal, path: tuple[Any, ...], *, key: bool = False) -> None:
        self.problems.extend([refused.at(self.places.where(path, key=key))])

    def _domains(self) -> dict[str, Any]:
        chosen: dict[str, Any] = {}
        for name, value in self._block("domains").items():
            path = ("domains", name)
            chosen[name] = {} if value is None else value
            if self.models is None:
                continue
            if name not in self.models:
                self.problems.add(
                    "unknown-domain",
                    f"domain {name!r} is not installed (installed: {', '.join(self.models) or 'none'})",
                    did_you_mean(name, self.models)
                    or "install the plugin that brings it, or name its file with --plugin",
                    self.places.where(path, key=True),
                )
                continue
            model = self.models[name].options
            if model is None:
                if chosen[name]:
                    self.problems.add(
                        "no-options",
                        f"domain {name!r} takes no options",
                        f"write {name}: {{}}",
                        self.places.where(path),
                    )
                continue
            validated(
                model, chosen[name], path=path, owner=f"domain {name!r}", places=self.places, problems=self.problems
            )
        return chosen

    def _meter(self, tag: str, value: Any) -> MeterSpec | None:
        path, owner = ("meters", tag), f"meter {tag!r}"
        if not tag.strip() or tag != tag.strip() or not tag.isprintable():
            self.problems.add(
                "bad-name",
                f"meter tag {tag!r} is blank or has blanks around it",
                "write it as in the header of the readings",
                self.places.where(path, key=True),
            )
            return None
        if isinstance(value, str):
            self.problems.add(
                "wrong-type",
                f"{owner} is {value!r}, no block of keys",
                f"write {tag}: {{reads: supply.flow, unit: L/min, sigma: 1 % of reading}}",
                self.places.where(path),
            )
            return None
        model = validated(MeterModel, value, path=path, owner=owner, places=self.places, problems=self.problems)
        if model is None and not isinstance(value, dict):
            return None
        unit = span = None
        reads: tuple[tuple[str, float], ...] | None = None
        try:
            spot = (*path, "unit")
            unit = read_unit(value.get("unit"), owner, self.places.texts.get(spot) or None)
        except Refusal as refused:
            self._refused(refused, (*path, "unit"), key="unit" not in value)
        if isinstance(value.get("reads"), str):
            try:
                reads = read_reads(value["reads"], owner)
            except Refusal as refused:
                self._refused(refused, (*path, "reads"))
        if unit is None:
            return None
        span_ok = True
        if "span" in value:
            try:
                span = read_span(value["span"], unit, f"span of {owner}")
            except Refusal as refused:
                span_ok = False
                self._refused(refused, (*path, "span"))
        sigma = read_sigma(
            value,
            unit=unit,
            # A span that was refused is not missing as well; the size does not matter any more.
            span=span if span_ok else (0.0, 1.0),
            owner=owner,
            path=path,
            places=self.places,
            problems=self.problems,
        )
        if model is None or reads is None or sigma is None or not span_ok:
            return None
        options = {k: v for k in _METER_OPTIONS if (v := getattr(model, k)) is not None}
        if "reading" in options:
            options["reading"] = value["reading"]
        if value.get("calibrated") is not None:
            options["calibrated"] = read_calibrations(value["calibrated"], tag, self.places, self.problems)
        return MeterSpec(tag, reads, unit, sigma, span, options)

    def _known(self, name: str, value: Any) -> KnownSpec | None:
        path, owner = ("known", name), f"known {name!r}"
        block = value if isinstance(value, dict) else {"value": value}
        spot = (*path, "value") if isinstance(value, dict) else path
        model = validated(KnownModel, block, path=path, owner=owner, places=self.places, problems=self.problems)
        if "value" not in block:
            return None
        try:
            text = self.places.text(spot, block["value"]) if block["value"] is not None else None
            number, unit = read_quantity(
                text if not isinstance(block["value"], (dict, list)) else block["value"], owner
            )
        except Refusal as refused:
            self._refused(refused, spot)
            return None
        before = len(self.problems.found)
        sigma = read_sigma(
            block,
            unit=unit,
            span=None,
            owner=owner,
            path=path,
            places=self.places,
            problems=self.problems,
            required=False,
            allow_span=False,
        )
        if model is None or len(self.problems.found) > before:
            return None
        return KnownSpec(unquoted(name), number, unit, sigma)

    def _each(self, section: str, read: Callable[[Any, str], Any]) -> dict[str, Any]:
        found: dict[str, Any] = {}
        for name, value in self._block(section).items():
            path = (section, name)
            text = self.places.text(path, value) if isinstance(value, (int, float)) else value
            try:
                found[unquoted(name)] = read(text, f"{section} of {name!r}")
            except Refusal as refused:
                self._refused(refused, path)
        return found

    def _figures(self) -> dict[str, str]:
        found: dict[str, str] = {}
        for name, value in self._block("figures").items():
            path = ("figures", name)
            if value is None or isinstance(value, (bool, dict, list)) or not str(value).strip():
                self.problems.add(
                    "figure-missing",
                    f"figure {name!r} is no formula",
                    "write e.g. branch_a.flow / supply.flow",
                    self.places.where(path),
                )
                continue
            found[name] = str(value).strip()
        return found

    def _readings(self) -> str | dict[str, Any] | None:
        value = self.data.get("readings")
        if value is None or isinstance(value, dict):
            return value
        if isinstance(value, str) and value.strip():
            return value.strip()
        self.problems.add(
            "wrong-type",
            "readings is neither a file name nor a block of keys",
            "write e.g. readings: readings.csv",
            self.places.where(("readings",)),
        )
        return None

    def _campaign(
        self, meters: Mapping[str, MeterSpec], tags: tuple[str, ...], streams: tuple[str, ...]
    ) -> CampaignSpec:
        # That room reads quantities with the help of this one, so it is loaded when this one is complete.
        from ..campaign.read import read_campaign

        return read_campaign(self.data, meters, tags, streams, self.places, self.problems)

    def _settings(self) -> Settings:
        value = self.data.get("settings")
        if value is None:
            return Settings()
        found = validated(
            SettingsModel, value, path=("settings",), owner="settings", places=self.places, problems=self.problems
        )
        return Settings(**found.model_dump()) if found else Settings()
