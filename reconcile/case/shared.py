"""Shared errors: one cause behind several meters, and correlations that can hold together."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from ..errors import Problems, did_you_mean
from .models import SharedErrorModel
from .places import Places
from .sigma import read_sigma
from .spec import MeterSpec, SharedErrorSpec, SigmaSpec
from .validate import validated

__all__ = ["clashing_meters", "read_shared_errors"]

Array = npt.NDArray[np.float64]


def read_shared_errors(
    data: dict[str, Any],
    meters: dict[str, MeterSpec],
    all_tags: tuple[str, ...],
    places: Places,
    problems: Problems,
) -> dict[str, SharedErrorSpec]:
    """Read the block ``shared_errors:``.

    Parameters
    ----------
    data : dict
    meters : dict of tag to MeterSpec
        Those that were read without problems.
    all_tags : tuple of str
        All tags that the case names; a meter with problems of its own is not missed here.
    places : Places
    problems : Problems

    Returns
    -------
    dict of name to SharedErrorSpec
    """
    found: dict[str, SharedErrorSpec] = {}
    for name, value in data.items():
        path = ("shared_errors", name)
        owner = f"shared error {name!r}"
        if not validated(SharedErrorModel, value, path=path, owner=owner, places=places, problems=problems):
            continue
        tags = _tags(value["meters"], all_tags, path, owner, places, problems)
        sigmas = _sigmas(value, tags, meters, path, owner, places, problems)
        pairs = _correlations(value.get("correlations"), tags, path, owner, places, problems)
        if len(tags) == len(value["meters"]) and len(sigmas) == len(tags):
            found[name] = SharedErrorSpec(name, tuple(sigmas), tags, pairs)
    return found


def _tags(
    entries: list[Any], known: tuple[str, ...], path: tuple[Any, ...], owner: str, places: Places, problems: Problems
) -> tuple[str, ...]:
    tags: list[str] = []
    for i, entry in enumerate(entries):
        spot = (*path, "meters", i)
        tag = places.text(spot, entry)
        if tag not in known:
            problems.add(
                "unknown-meter",
                f"{owner}: there is no meter {tag!r}",
                did_you_mean(tag, known) or "name a tag that stands under meters:",
                places.where(spot),
            )
        elif tag in tags:
            problems.add("meter-twice", f"{owner} names meter {tag!r} twice", "remove one", places.where(spot))
        else:
            tags.append(tag)
    return tuple(tags)


def _sigmas(
    value: dict[str, Any],
    tags: tuple[str, ...],
    meters: dict[str, MeterSpec],
    path: tuple[Any, ...],
    owner: str,
    places: Places,
    problems: Problems,
) -> list[SigmaSpec]:
    stated = value.get("sigma")
    each = isinstance(stated, dict)
    sigmas: list[SigmaSpec] = []
    if isinstance(stated, dict):
        for tag in stated:
            if tag not in tags:
                problems.add(
                    "unknown-meter",
                    f"sigma of {owner}: {tag!r} is none of its meters",
                    did_you_mean(tag, tags) or "add it to meters:, or leave it out",
                    places.where((*path, "sigma", tag), key=True),
                )
    for tag in tags:
        meter = meters.get(tag)
        if meter is None:
            continue
        # One sigma for meters of several units is converted into the unit of each.
        data, spot = (value, path)
        if each:
            if tag not in value["sigma"]:
                problems.add(
                    "sigma-missing",
                    f"{owner} has no sigma for meter {tag!r}",
                    f"add {tag}: under its sigma",
                    places.where((*path, "sigma"), key=True),
                )
                continue
            data, spot = {"sigma": value["sigma"][tag]}, (*path, "sigma")
        reader = _Shifted(places, tag) if each else places
        sigma = read_sigma(
            {"sigma": data["sigma"]} if "sigma" in data else {},
            unit=meter.unit,
            span=meter.span,
            owner=f"{owner} for meter {tag!r}",
            path=spot,
            places=reader,
            problems=problems,
        )
        if sigma is not None:
            sigmas.append(sigma)
        elif not each and (not problems.found or problems.found[-1].code not in ("sigma-unit", "span-missing")):
            # What is wrong with the one text need not be told for every meter.
            break
    return sigmas


class _Shifted(Places):
    """Places of ``sigma: {TAG: ...}`` for a reader that asks for ``sigma``."""

    def __init__(self, places: Places, tag: str) -> None:
        super().__init__(places.file, places.values, places.keys, places.texts, places.tables)
        self.tag = tag

    def _shift(self, path: tuple[Any, ...]) -> tuple[Any, ...]:
        # (shared_errors, name, sigma, sigma, item...) -> (shared_errors, name, sigma, TAG, item...)
        return (*path[:3], self.tag, *path[4:]) if len(path) > 3 else path

    def where(self, path: tuple[Any, ...], *, key: bool = False) -> Any:
        return super().where(self._shift(path), key=key)

    def text(self, path: tuple[Any, ...], value: Any) -> str:
        return super().text(self._shift(path), value)


def _correlations(
    entries: list[Any] | None,
    tags: tuple[str, ...],
    path: tuple[Any, ...],
    owner: str,
    places: Places,
    problems: Problems,
) -> tuple[tuple[str, str, float], ...] | None:
    if entries is None:
        return None
    pairs: dict[tuple[str, str], float] = {}
    clean = True

    def complain(spot: tuple[Any, ...], code: str, message: str, hint: str) -> None:
        nonlocal clean
        clean = False
        problems.add(code, f"{owner}: {message}", hint, places.where(spot))

    for i, entry in enumerate(entries):
        spot = (*path, "correlations", i)
        if not isinstance(entry, list) or len(entry) != 3:
            complain(spot, "correlation-unreadable", "a correlation is no [tag, tag, number]", "e.g. [FT-1, FT-2, 0.9]")
            continue
        a, b = (places.text((*spot, k), entry[k]) for k in (0, 1))
        missing = [(k, t) for k, t in enumerate((a, b)) if t not in tags]
        for k, tag in missing:
            complain(
                (*spot, k),
                "unknown-meter",
                f"correlation names {tag!r}, which is none of its meters",
                did_you_mean(tag, tags) or "add it to meters:",
            )
        if missing:
            continue
        rho = entry[2]
        if isinstance(rho, bool) or not isinstance(rho, (int, float)) or not -1.0 < rho < 1.0:
            complain(
                (*spot, 2),
                "correlation-range",
                f"correlation of {a} and {b} is {places.text((*spot, 2), rho)}",
                "write a number between -1 and 1; leave correlations out for meters that move fully together",
            )
        elif a == b or (a, b) in pairs or (b, a) in pairs:
            complain(
                spot, "correlation-twice", f"the pair {a}, {b} is named twice or with itself", "keep each pair once"
            )
        else:
            pairs[a, b] = float(rho)
    if clean:
        clash = clashing_meters(tags, pairs)
        if clash:
            named = ", ".join(
                f"{a} with {b} = {pairs.get((a, b), pairs.get((b, a), 0.0)):g}"
                for k, a in enumerate(clash)
                for b in clash[k + 1 :]
            )
            complain(
                (*path, "correlations"),
                "correlation-clash",
                f"{named} cannot all hold: the matrix is not positive definite",
                "correct one of them; a pair that is not named counts as 0",
            )
    return tuple((a, b, r) for (a, b), r in pairs.items())


def clashing_meters(tags: tuple[str, ...], pairs: dict[tuple[str, str], float]) -> tuple[str, ...]:
    """Smallest set of meters, none to spare, whose correlations cannot hold together; empty if all can.

    Parameters
    ----------
    tags : tuple of str
    pairs : dict of (tag, tag) to correlation

    Returns
    -------
    tuple of str
    """
    number = {t: i for i, t in enumerate(tags)}
    matrix = np.eye(len(tags))
    for (a, b), rho in pairs.items():
        matrix[number[a], number[b]] = matrix[number[b], number[a]] = rho
    if _definite(matrix):
        return ()
    kept = list(range(len(tags)))
    for i in range(len(tags)):
        fewer = [k for k in kept if k != i]
        # A principal part of a definite matrix is definite, so one pass leaves none to spare.
        if not _definite(matrix[np.ix_(fewer, fewer)]):
            kept = fewer
    return tuple(tags[k] for k in kept)


def _definite(matrix: Array) -> bool:
    return bool(matrix.size == 0 or np.linalg.eigvalsh(matrix)[0] > 1e-12 * len(matrix))
