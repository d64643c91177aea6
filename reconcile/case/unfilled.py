"""Places of a case that a skeleton left to the user."""

from __future__ import annotations

from typing import Any

from ..errors import Location, Problems
from .places import Places

__all__ = ["FILL_IN", "refuse_unfilled"]

FILL_IN = "FILL_IN"


def refuse_unfilled(data: Any, places: Places, problems: Problems) -> None:
    """Tell every value that still says ``FILL_IN``; nothing else of the case makes sense before.

    Raises
    ------
    InputError
        If there is one.
    """
    count = 0
    for path, value in _texts(data, ()):
        if FILL_IN not in value:
            continue
        count += 1
        where: Location = places.where(path)
        if path[0] == "streams":
            words, hint = f"stream {path[1]!r} is still to be drawn", "write from -> to, e.g. outside -> tank"
        elif path[-1] == "unit":
            of = f"meter {path[1]!r}" if path[0] == "meters" else f"domain {path[1]!r}" if len(path) > 2 else "it"
            words, hint = f"the unit of {of} is still to be stated", "write e.g. kg/h or L/min"
        else:
            words, hint = f"{'.'.join(str(p) for p in path)} is still to be filled in", f"replace {FILL_IN}"
        problems.add("to-fill-in", words, hint, where)
    if count:
        problems.raise_if_any()


def _texts(data: Any, path: tuple[Any, ...]) -> list[tuple[tuple[Any, ...], str]]:
    if isinstance(data, str):
        return [(path, data)]
    if isinstance(data, dict):
        return [found for k, v in data.items() for found in _texts(v, (*path, k))]
    if isinstance(data, list):
        return [found for i, v in enumerate(data) for found in _texts(v, (*path, i))]
    return []
