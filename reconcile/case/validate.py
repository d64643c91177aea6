"""Runs a pydantic model over a part of the case and tells its errors in our words, each at its place."""

from __future__ import annotations

from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from ..errors import PluginError, Problem, Problems, did_you_mean
from .places import Places

__all__ = ["keys_of", "validated"]

M = TypeVar("M", bound=BaseModel)
_WANTED = {
    "string_type": "a text",
    "dict_type": "a block of 'key: value' lines",
    "model_type": "a block of 'key: value' lines",
    "model_attributes_type": "a block of 'key: value' lines",
    "list_type": "a list",
    "tuple_type": "a list",
    "int_type": "a whole number",
    "int_parsing": "a whole number",
    "int_from_float": "a whole number",
    "float_type": "a number",
    "float_parsing": "a number",
    "finite_number": "a finite number",
    "bool_type": "true or false",
    "bool_parsing": "true or false",
}


def keys_of(model: type[BaseModel]) -> list[str]:
    """Keys that a model knows, aliases instead of names where there are any."""
    return [f.alias or name for name, f in model.model_fields.items()]


def validated(
    model: type[M],
    data: Any,
    *,
    path: tuple[Any, ...],
    owner: str,
    places: Places,
    problems: Problems,
    more_keys: tuple[str, ...] = (),
) -> M | None:
    """Check a part of the case.

    Parameters
    ----------
    model : type of pydantic model
    data : plain data
    path : tuple
        Where the data stands in the case.
    owner : str
        How messages name it, e.g. ``meter 'FT-1'``.
    places : Places
    problems : Problems
        Takes one problem per error.
    more_keys : tuple of str
        Keys that are read elsewhere, for the suggestions.

    Returns
    -------
    model or None
    """
    try:
        return model.model_validate(data)
    except ValidationError as error:
        errors = error.errors(include_url=False)
        unknown = {e["loc"] for e in errors if e["type"] == "extra_forbidden"}
        # A misspelt key is one mistake: it is told as unknown, not once more as missing.
        problems.extend(
            _tell(e, model, data, path, owner, places, more_keys)
            for e in errors
            if e["type"] != "missing" or not _is_near(e["loc"], unknown)
        )
        return None
    except Exception as error:
        # A validator of a plugin's own model may raise anything; one of ours that does is a bug of this program.
        if model.__module__.startswith("reconcile."):
            raise
        raise PluginError(
            model.__module__.removeprefix("reconcile_plugin_file_"),
            f"checking {owner} failed with {type(error).__name__}: {str(error)[:200]!r}",
            hint="report this to the author of the plugin; the program itself is well",
        ) from error


def _tell(
    error: Any,
    model: type[BaseModel],
    data: Any,
    path: tuple[Any, ...],
    owner: str,
    places: Places,
    more_keys: tuple[str, ...],
) -> Problem:
    kind = str(error["type"])
    inside, at = _steps(error["loc"], data)
    last = str(error["loc"][-1]) if error["loc"] else ""
    where = places.where((*path, *inside))
    subject = f"{' '.join(str(s) for s in inside)} of {owner}" if inside else owner
    if kind == "extra_forbidden":
        around = " ".join(str(s) for s in inside[:-1])
        known = [*_keys_at(model, inside[:-1]), *(more_keys if not around else ())]
        hint = did_you_mean(last, known) or (f"known keys: {', '.join(known)}" if known else "leave it out")
        place = places.where((*path, *inside), key=True)
        return Problem(
            "unknown-key", f"unknown key {last!r} in {f'{around} of {owner}' if around else owner}", hint, place
        )
    if kind == "missing":
        near = _near_missing(last, at, _keys_at(model, inside))
        return Problem(
            "missing-key",
            f"{subject} has no {last!r}",
            near or _describe(model, inside, last),
            places.where((*path, *inside), key=True),
        )
    shown = _shown(at, places, (*path, *inside))
    if kind in _WANTED:
        return Problem("wrong-type", f"{subject} is {shown}", f"write {_WANTED[kind]}", where)
    context = error.get("ctx", {})
    if kind == "literal_error":
        hint = did_you_mean(str(at), _words(context)) or f"write {context.get('expected', '')}"
        return Problem("unknown-choice", f"{subject} is {shown}", hint, where)
    limits = {
        "greater_than": "above",
        "greater_than_equal": "at least",
        "less_than": "below",
        "less_than_equal": "at most",
    }
    if kind in limits:
        limit = next((context[k] for k in ("gt", "ge", "lt", "le") if k in context), 0.0)
        return Problem("out-of-range", f"{subject} is {shown}", f"write a number {limits[kind]} {limit:g}", where)
    if kind in ("too_short", "string_too_short"):
        least = context.get("min_length", 1)
        what = "is empty" if least == 1 else f"has fewer than {least} entries"
        return Problem("too-short", f"{subject} {what}", f"write at least {least}", where)
    text = str(error["msg"]).removeprefix("Value error, ").removeprefix("Assertion failed, ")
    return Problem("option-refused", f"{subject}: {text}", "", where)


def _steps(loc: tuple[Any, ...], data: Any) -> tuple[tuple[Any, ...], Any]:
    """Follow an error's location as far as the data goes; names of union members in between are left out."""
    inside: list[Any] = []
    at = data
    for step in loc:
        if (isinstance(at, dict) and step in at) or (isinstance(at, list) and isinstance(step, int) and step < len(at)):
            at = at[step]
        else:
            continue
        inside.append(step)
    return tuple(inside), at


def _is_near(missing: tuple[Any, ...], unknown: set[tuple[Any, ...]]) -> bool:
    beside = [str(u[-1]) for u in unknown if u[:-1] == missing[:-1]]
    return bool(did_you_mean(str(missing[-1]), beside))


def _keys_at(model: type[BaseModel], inside: tuple[Any, ...]) -> list[str]:
    """Keys that are known at a place inside a model."""
    current: Any = model
    for step in inside:
        field = getattr(current, "model_fields", {}).get(step)
        if field is None:
            if isinstance(step, int):
                continue
            # A key of a mapping whose values are models.
            continue
        current = _model_in(field.annotation) or current
    return keys_of(current) if isinstance(current, type) and issubclass(current, BaseModel) else []


def _model_in(annotation: Any) -> type[BaseModel] | None:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    for part in getattr(annotation, "__args__", ()):
        found = _model_in(part)
        if found:
            return found
    return None


def _near_missing(name: str, at: Any, known: list[str]) -> str:
    """Name the unknown key that was perhaps meant to be the missing one."""
    others = [k for k in at if k not in known] if isinstance(at, dict) else []
    near = did_you_mean(name, others)
    return f"{near.removeprefix('did you mean ').rstrip('?')} looks like it" if near else ""


def _describe(model: type[BaseModel], inside: tuple[Any, ...], name: str) -> str:
    field = model.model_fields.get(name) if not inside else None
    text = (field.description or "") if field else ""
    return f"add {name}: {text[0].lower() + text[1:]}" if text else f"add {name}:"


def _words(context: dict[str, Any]) -> list[str]:
    return [w.strip("' ") for w in str(context.get("expected", "")).replace(" or ", ",").split(",")]


def _shown(at: Any, places: Places, path: tuple[Any, ...]) -> str:
    if isinstance(at, dict):
        return "a block of keys"
    if isinstance(at, list):
        return "a list"
    if at is None:
        return "blank"
    return repr(places.text(path, at))
