"""Versions of domains that a case asks for."""

from __future__ import annotations

import re
from collections.abc import Collection, Mapping
from typing import Any

from ..errors import Problems, did_you_mean
from .places import Places
from .spec import DomainModels

__all__ = ["refuse_older"]


def refuse_older(
    needs: Mapping[str, Any],
    domains: Collection[str],
    installed: Mapping[str, DomainModels] | None,
    places: Places,
    problems: Problems,
) -> None:
    """Report domains that are older than the case asks for: results could differ.

    Parameters
    ----------
    needs : mapping of domain name to text such as ``at least 1.2``
    domains : collection of str
        Domains that the case uses.
    installed : mapping, optional
        Without it no version is known, so none is compared.
    places : Places
    problems : Problems
    """
    for name, value in needs.items():
        path = ("needs", name)
        text = places.text(path, value).strip()
        asked = re.fullmatch(r"at least (\d+(?:\.\d+)*)", text)
        if asked is None:
            problems.add(
                "version-unreadable",
                f"version {text!r} of domain {name!r} cannot be read",
                f"write {name}: at least 1.2",
                places.where(path),
            )
        elif name not in domains:
            problems.add(
                "unknown-domain",
                f"the case needs a version of domain {name!r}, but does not use that domain",
                did_you_mean(name, domains) or "name it under domains: as well",
                places.where(path, key=True),
            )
        elif installed is not None and name in installed:
            found = re.match(r"\d+(?:\.\d+)*", installed[name].version)
            if found is None or _numbers(found[0]) < _numbers(asked[1]):
                problems.add(
                    "domain-too-old",
                    f"the case needs domain {name!r} in version {asked[1]} or later; "
                    f"installed is {installed[name].version or 'one without a version'}. Results could differ",
                    "update the plugin that brings it",
                    places.where(path),
                )


def _numbers(version: str) -> tuple[int, ...]:
    parts = [int(n) for n in version.split(".")]
    while len(parts) > 1 and parts[-1] == 0:
        parts.pop()
    return tuple(parts)
