"""The JSON Schema of a case file, with the options of the given domains, for editors."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal

from pydantic import BaseModel

from ..campaign.options import LabModel, LineUpModel, WindowsModel
from .models import CaseModel, KnownModel, MeterModel, SettingsModel, SharedErrorModel
from .spec import DomainModels
from .trajectory import TrajectoryModel

__all__ = ["json_schema"]

_ARROW = r"^\s*\S+\s*->\s*\S+\s*$"


def json_schema(option_models: Mapping[str, DomainModels] | None = None) -> dict[str, Any]:
    """Return the JSON Schema (draft 2020-12) of case files.

    Parameters
    ----------
    option_models : mapping of domain name to DomainModels, optional
        The domains whose options are to be included; without it, any domain and any key of it is allowed.

    Returns
    -------
    dict
        Safe to write as JSON. What a text must say (a sigma, a unit) is described, not checked.
    """
    definitions: dict[str, Any] = {}
    schema = CaseModel.model_json_schema()
    top = schema["properties"]
    meter, known = _model(MeterModel, definitions), _model(KnownModel, definitions)
    shared, settings = _model(SharedErrorModel, definitions), _model(SettingsModel, definitions)
    top["domains"].update(_domains(option_models, definitions))
    route = {"type": "string", "pattern": _ARROW}
    stream = _extra_keys("stream", option_models, definitions)
    stream["properties"] = {"path": {**route, "description": "from -> to"}, **stream["properties"]}
    stream["required"] = ["path"]
    top["streams"] = _section(top["streams"], {"anyOf": [route, stream]}, table=True)
    top["nodes"] = _section(
        top["nodes"], {"anyOf": [_extra_keys("node", option_models, definitions), {"type": "null"}]}
    )
    top["meters"] = _section(top["meters"], meter, table=True)
    top["known"] = _section(top["known"], {"anyOf": [known, {"type": ["string", "number"]}]})
    top["shared_errors"] = _section(top["shared_errors"], shared)
    top["bounds"] = _section(top["bounds"], {"type": "string"})
    top["design"] = _section(top["design"], {"type": ["string", "number"]})
    top["figures"] = _section(top["figures"], {"type": ["string", "number"]})
    top["readings"] = {**top["readings"], "type": ["string", "object", "null"]}
    windows, lab = _model(WindowsModel, definitions), _model(LabModel, definitions)
    trajectory = _model(TrajectoryModel, definitions)
    blocks = (
        ("settings", [settings]),
        ("windows", [windows]),
        ("lab", [lab, {"type": "string"}]),
        ("trajectory", [trajectory]),
    )
    for key, kinds in blocks:
        top[key] = {"description": top[key]["description"], "anyOf": [*kinds, {"type": "null"}]}
    top["line_ups"] = _section(top["line_ups"], _model(LineUpModel, definitions))
    return {
        "$schema": "https://json-schema.org/draft/2020-12/schema",
        **{k: v for k, v in schema.items() if k not in ("$defs", "title")},
        "title": "Case file",
        "$defs": definitions,
    }


def _section(described: dict[str, Any], entry: dict[str, Any], *, table: bool = False) -> dict[str, Any]:
    kinds: list[dict[str, Any]] = [{"type": "object", "additionalProperties": entry}, {"type": "null"}]
    if table:
        kinds.append({"type": "string", "description": "Name of a table file with the same keys as columns"})
    return {"description": described.get("description", ""), "anyOf": kinds}


def _model(model: type[BaseModel], definitions: dict[str, Any], name: str | None = None) -> dict[str, Any]:
    """Put a model's schema among the definitions and return a reference to it."""
    label = name or model.__name__.removesuffix("Model")
    schema = model.model_json_schema(ref_template="#/$defs/" + label + ".{model}")
    for inner, body in schema.pop("$defs", {}).items():
        definitions[f"{label}.{inner}"] = body
    definitions[label] = schema
    return {"$ref": f"#/$defs/{label}"}


def _domains(models: Mapping[str, DomainModels] | None, definitions: dict[str, Any]) -> dict[str, Any]:
    if models is None:
        return {}
    properties: dict[str, Any] = {}
    for name, kinds in models.items():
        if kinds.options is None:
            properties[name] = {"anyOf": [{"type": "object", "maxProperties": 0}, {"type": "null"}]}
            continue
        options = _model(kinds.options, definitions, f"domain-{name}")
        required = any(f.is_required() for f in kinds.options.model_fields.values())
        properties[name] = options if required else {"anyOf": [options, {"type": "null"}]}
    return {"properties": properties, "additionalProperties": False}


def _extra_keys(
    which: Literal["stream", "node"], models: Mapping[str, DomainModels] | None, definitions: dict[str, Any]
) -> dict[str, Any]:
    """Keys of streams or nodes that any of the domains reads; which of them are allowed depends on the case."""
    properties: dict[str, Any] = {}
    open_ended = models is None
    for domain, kinds in (models or {}).items():
        model = getattr(kinds, which)
        if model is None:
            continue
        open_ended = open_ended or model.model_config.get("extra") == "allow"
        label = f"{which}-{domain}"
        _model(model, definitions, label)
        for key, body in definitions[label].get("properties", {}).items():
            # Two domains may read the same key; either meaning is then allowed here.
            properties[key] = {"anyOf": [properties[key], body]} if key in properties else body
    return {"type": "object", "properties": properties, "additionalProperties": open_ended}
