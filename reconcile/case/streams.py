"""Streams and nodes of a case: paths, names, and the extra keys that the domains read."""

from __future__ import annotations

import difflib
import re
from collections import Counter
from collections.abc import Mapping
from typing import Any, Literal

from ..errors import Problem, Problems, did_you_mean
from .models import StreamModel
from .places import Places
from .quantities import Refusal
from .spec import DomainModels, StreamSpec
from .validate import keys_of, validated

__all__ = ["OptionReader", "read_nodes", "read_streams"]

OUTSIDE = "outside"
NAME = re.compile(r"\w[\w-]*")
_PATH_HINT = "write from -> to, e.g. header -> tank, with 'outside' for the environment"


class OptionReader:
    """Checks the extra keys of streams and nodes with the models of the case's domains."""

    def __init__(
        self,
        chosen: tuple[str, ...],
        installed: Mapping[str, DomainModels] | None,
        places: Places,
        problems: Problems,
    ) -> None:
        self.chosen = chosen
        self.installed = installed
        self.places = places
        self.problems = problems
        # With a domain that nobody knows, its keys cannot be told from misspelt ones.
        self.lenient = installed is None or any(d not in installed for d in chosen)

    def keys(self, which: Literal["stream", "node"]) -> tuple[str, ...]:
        """Keys that the domains of the case declare."""
        return tuple(dict.fromkeys(k for _, model in self._models(which) for k in keys_of(model)))

    def open_ended(self, which: Literal["stream", "node"]) -> bool:
        """Whether any further key may be right."""
        return self.lenient or any(m.model_config.get("extra") == "allow" for _, m in self._models(which))

    def _models(self, which: Literal["stream", "node"]) -> list[tuple[str, Any]]:
        known = self.installed or {}
        pairs = [(d, getattr(known[d], which)) for d in self.chosen if d in known]
        return [(d, m) for d, m in pairs if m is not None]

    def read(
        self, which: Literal["stream", "node"], extra: dict[str, Any], path: tuple[Any, ...], owner: str
    ) -> dict[str, Any]:
        """Return the checked values of the extra keys that the user wrote."""
        if self.installed is None:
            return dict(extra)
        checked: dict[str, Any] = {}
        left = dict(extra)
        for domain, model in self._models(which):
            names = keys_of(model)
            takes_all = model.model_config.get("extra") == "allow"
            mine = {k: v for k, v in extra.items() if k in names}
            if takes_all:
                mine.update({k: v for k, v in extra.items() if k not in self.keys(which)})
            found = validated(
                model,
                mine,
                path=path,
                owner=f"{owner} (domain {domain})",
                places=self.places,
                problems=self.problems,
            )
            if found is not None:
                checked.update(found.model_dump(exclude_unset=True))
            for key in mine:
                left.pop(key, None)
        for key in [] if self.lenient else left:
            self.problems.extend([self._unknown(which, key, path, owner)])
        return checked

    def _unknown(self, which: Literal["stream", "node"], key: str, path: tuple[Any, ...], owner: str) -> Problem:
        own = ["path"] if which == "stream" else []
        known = [*own, *self.keys(which)]
        elsewhere = [
            d
            for d, m in (self.installed or {}).items()
            if d not in self.chosen and getattr(m, which) is not None and key in keys_of(getattr(m, which))
        ]
        hint = (
            f"it belongs to domain {elsewhere[0]!r}, which this case does not name under domains:"
            if elsewhere
            else did_you_mean(key, known)
            or (f"keys of a {which} here: {', '.join(known)}" if known else f"no domain here reads keys of a {which}")
        )
        return Problem(
            "unknown-key", f"unknown key {key!r} in {owner}", hint, self.places.where((*path, key), key=True)
        )


def read_streams(data: dict[str, Any], options: OptionReader) -> dict[str, StreamSpec]:
    """Read the block ``streams:``."""
    places, problems = options.places, options.problems
    streams: dict[str, StreamSpec] = {}
    for name, value in data.items():
        path = ("streams", name)
        owner = f"stream {name!r}"
        if not NAME.fullmatch(name):
            problems.extend([_bad_name("stream", name, places.where(path, key=True))])
        extra: dict[str, Any] = {}
        route: Any = value
        spot: tuple[Any, ...] = path
        if isinstance(value, dict):
            if "path" not in value:
                near = difflib.get_close_matches("path", value, n=1, cutoff=0.5)
                problems.add(
                    "stream-no-path",
                    f"{owner} has no path",
                    f"did you mean 'path' by {near[0]!r}?"
                    if near
                    else f"add path: {_PATH_HINT.removeprefix('write ')}",
                    places.where(path, key=True),
                )
                continue
            if validated(StreamModel, value, path=path, owner=owner, places=places, problems=problems) is None:
                continue
            extra = {k: v for k, v in value.items() if k != "path"}
            route, spot = value["path"], (*path, "path")
            if isinstance(route, (int, float)):
                route = places.text(spot, route)
        checked = options.read("stream", extra, path, owner)
        try:
            source, target = _ends(route, owner)
        except Refusal as refused:
            problems.extend([refused.at(places.where(spot))])
            continue
        streams[name] = StreamSpec(name, source, target, checked)
    return streams


def _bad_name(kind: str, name: str, where: Any) -> Problem:
    better = re.sub(r"[^\w-]+", "_", name).strip("_-")
    return Problem(
        "bad-name",
        f"{kind} name {name!r} may hold letters, digits, _ and - only",
        f"write e.g. {better}" if better else "give it a name",
        where,
    )


def _ends(route: Any, owner: str) -> tuple[str, str]:
    """Split ``a -> b`` into its two ends."""
    if not isinstance(route, str) or not route.strip():
        raise Refusal("stream-no-path", f"{owner} has no path", _PATH_HINT)
    text = route.strip()
    if "->" not in text:
        guess = re.split(r"\s*(?:→|=>|>|\bto\b|,)\s*", text)
        back = re.split(r"\s*<-+\s*", text)
        hint = _PATH_HINT
        if len(guess) == 2 and all(NAME.fullmatch(g) for g in guess):
            hint = f"write {guess[0]} -> {guess[1]}"
        elif len(back) == 2 and all(back):
            hint = f"write {back[1]} -> {back[0]}"
        raise Refusal("stream-no-arrow", f"{owner}: {text!r} has no arrow", hint)
    ends = [e.strip() for e in text.split("->")]
    if len(ends) > 2:
        raise Refusal(
            "stream-many-ends",
            f"{owner}: {text!r} passes through a node",
            "write one stream for each arrow, with names of their own",
        )
    source, target = ends
    if not source or not target:
        have, lack = ("source", "destination") if source else ("destination", "source")
        verb = "leaves" if source else "enters"
        raise Refusal(
            "stream-one-end",
            f"{owner} has {'a ' + have if source or target else 'neither source nor destination'} but no {lack}"
            if source or target
            else f"{owner} has neither source nor destination",
            f"write 'outside' if it {verb} the system, e.g. "
            + (f"{source} -> outside" if source else f"outside -> {target or 'header'}"),
        )
    for end in (source, target):
        if end != OUTSIDE and end.casefold() == OUTSIDE:
            raise Refusal("outside-spelling", f"{owner}: {end!r} is no node", f"did you mean {OUTSIDE!r}?")
        if not NAME.fullmatch(end):
            problem = _bad_name("node", end, None)
            raise Refusal(problem.code, f"{owner}: {problem.message}", problem.hint)
    if source == target == OUTSIDE:
        raise Refusal(
            "stream-outside-twice",
            f"{owner} goes from outside to outside, past every node",
            "name the node that it leaves or enters",
        )
    if source == target:
        raise Refusal(
            "stream-self-loop",
            f"{owner} goes from {source!r} to {source!r}, which no balance can see",
            "correct one of its ends, or leave it out",
        )
    return source, target


def read_nodes(
    data: dict[str, Any], streams: Mapping[str, StreamSpec], options: OptionReader, *, complete: bool
) -> dict[str, dict[str, Any]]:
    """Read the block ``nodes:`` and join it with the nodes that the streams name.

    Parameters
    ----------
    data : dict
    streams : mapping of name to StreamSpec
    options : OptionReader
    complete : bool
        Whether all streams could be read; otherwise nothing is said of nodes that none of them names.

    Returns
    -------
    dict of name to options
        In the order in which streams name them.
    """
    places, problems = options.places, options.problems
    uses = Counter(e for s in streams.values() for e in (s.source, s.target) if e != OUTSIDE)
    nodes: dict[str, dict[str, Any]] = {n: {} for n in uses}
    for name, value in data.items():
        path = ("nodes", name)
        where = places.where(path, key=True)
        if name.casefold() == OUTSIDE:
            problems.add("outside-is-no-node", f"{name!r} is the environment, not a node", "leave it out here", where)
            continue
        if value is not None and not isinstance(value, dict):
            problems.add("wrong-type", f"node {name!r} is no block of keys", f"write {name}: {{key: value}}", where)
            continue
        if name not in uses and complete:
            near = did_you_mean(name, uses)
            problems.add(
                "node-unused", f"node {name!r} is in no stream", near or "add the stream, or leave the node out", where
            )
        nodes[name] = options.read("node", value or {}, path, f"node {name!r}")
    for name in uses:
        if name not in data and options.installed is not None:
            nodes[name] = options.read("node", {}, ("nodes", name), f"node {name!r}")
    if complete:
        _near_names(uses, data, streams, options)
    return nodes


def _near_names(
    uses: Counter[str], data: Mapping[str, Any], streams: Mapping[str, StreamSpec], options: OptionReader
) -> None:
    """Refuse a node of one stream whose name is nearly that of another: with a slip, both balances are wrong."""
    # Numbered names are near each other by nature, so digits must be equal.
    lonely = {n for n, count in uses.items() if count == 1 and n not in data}
    by_digits: dict[str, list[str]] = {}
    for name in uses:
        by_digits.setdefault(re.sub(r"\D", "", name), []).append(name)
    for stream in streams.values() if lonely else ():
        for end in {stream.source, stream.target} & lonely:
            others = [n for n in by_digits[re.sub(r"\D", "", end)] if n != end]
            near = (
                difflib.get_close_matches(end, others, n=1, cutoff=0.8) if len(end) > 3 and len(others) < 5000 else []
            )
            near = near or [n for n in others if n.casefold() == end.casefold()]
            if near:
                where = options.places.where(("streams", stream.name))
                options.problems.add(
                    "node-spelling",
                    f"stream {stream.name!r}: node {end!r} is in no other stream",
                    f"did you mean {near[0]!r}? If not, write {end}: {{}} under nodes:",
                    where,
                )
