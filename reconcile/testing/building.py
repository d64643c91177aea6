"""Checks of how a domain writes: it leaves its input alone, repeats itself, keeps to itself, and knows no order."""

from __future__ import annotations

import pickle
from collections.abc import Mapping
from typing import Any

import numpy as np

from ..errors import ReconcileError
from ..network import Network
from ..system import System
from .bench import Bench, Check, Stand
from .guard import watched
from .state import convert, drawn, stated_readings

__all__ = ["CHECKS", "same_outcome"]

SHUFFLED = ("streams", "nodes", "meters", "known", "bounds", "design")


def _write(stand: Stand, network: Network, options: dict[str, Any]) -> System:
    """Let all domains of a trial write once more."""
    system = System()
    stand.trial.plugins.build(network, system, list(options.items()))
    return system


def _options(stand: Stand) -> dict[str, Any]:
    out = {}
    for name, raw in stand.case.parts.spec.domains.items():
        kind = stand.trial.plugins.domains[name].domain.options
        out[name] = None if kind is None else kind.model_validate(raw)
    return out


def _fingerprint(network: Network, options: Mapping[str, Any]) -> bytes:
    plain = {k: None if v is None else v.model_dump() for k, v in options.items()}
    return pickle.dumps((network, plain))


def _pure(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        options = _options(stand)
        network = pickle.loads(pickle.dumps(stand.case.parts.network))
        before = _fingerprint(network, options)
        try:
            _write(stand, network, options)
        except ReconcileError as error:
            out.append(f"{stand.label}: {error}")
            continue
        if _fingerprint(network, options) != before:
            out.append(
                f"{stand.label}: the network or the options are not what they were before build(); copy, then change"
            )
    return out


def _repeatable(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        one, other = (_write(stand, stand.case.parts.network, _options(stand)) for _ in range(2))
        if not _equal(one, other):
            out.append(f"{stand.label}: two builds of one case give different balances")
    return out


def _equal(one: System, other: System) -> bool:
    if one.names() != other.names() or one.row_names() != other.row_names():
        return False
    a, b = one.equations, other.equations
    pairs = ((a.linear, b.linear), (a.products, b.products))
    return (
        all(p.shape == q.shape and abs(p - q).nnz == 0 for p, q in pairs)
        and np.array_equal(a.rhs, b.rhs)
        and np.array_equal(a.pairs, b.pairs)
        and np.array_equal(one.starts, other.starts, equal_nan=True)
    )


def _isolated(bench: Bench) -> list[str]:
    out = []
    package = bench.domain.__module__.split(".")[0]
    package = bench.domain.__module__ if package == "reconcile" else package
    for stand in bench.stands:
        with watched(package) as seen:
            system = _write(stand, stand.case.parts.network, _options(stand))
            system.equations.jacobian(np.where(np.isfinite(system.starts), system.starts, 1.0))
        out += [f"{stand.label}: build() uses {what}" for what in dict.fromkeys(seen)]
    return out


def _pickles(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        try:
            again = pickle.loads(pickle.dumps(stand.system))
        except Exception as error:
            out.append(
                f"{stand.label}: the balances cannot be sent to another process ({type(error).__name__}: {error}); "
                "functions of apply() must stand at the top of a module, functools.partial binds constants"
            )
            continue
        if not _equal(again, stand.system):
            out.append(f"{stand.label}: the balances are not the same after pickling")
    return out


# ------------------------------------------------------------------ order


def _order(bench: Bench) -> list[str]:
    out = []
    for stand in bench.stands:
        rng = bench.rng()
        case = dict(stand.trial.case)
        for key in SHUFFLED:
            if isinstance(case.get(key), Mapping):
                keys = list(case[key])
                # Reversed and then shuffled: even two entries change places.
                order = rng.permutation(len(keys))
                order = order[::-1] if np.array_equal(order, np.arange(len(keys))) else order
                case[key] = {keys[i]: case[key][keys[i]] for i in order}
        try:
            shuffled = Stand(stand.trial)
            shuffled.__dict__["case"] = stand.trial.load(case)
            out += [f"{stand.label}: {c}" for c in _differs(stand, shuffled, bench)]
        except ReconcileError as error:
            out.append(f"{stand.label}: with streams and meters in another order: {error}")
    return out


def _differs(stand: Stand, other: Stand, bench: Bench) -> list[str]:
    """Compare two builds of one network by the names of their variables and balances."""
    for kind, a, b in (
        ("variables", stand.system.names(), other.system.names()),
        ("balances", stand.system.row_names(), other.system.row_names()),
        ("constants", _constants(stand), _constants(other)),
    ):
        if set(a) != set(b):
            odd = sorted(set(a) ^ set(b))
            return [f"the order of streams, nodes or meters changes the {kind}: {', '.join(odd[:4])}"]
    x = stand.near(bench.rng())
    own = {stand.system.row_names()[i]: i for i in stand.own_indices()}
    there = {n: i for i, n in enumerate(other.system.row_names())}
    y = convert(x, stand.system, other.system)
    rows, columns = list(own.values()), [there[n] for n in own]
    one, two = _relative(stand, x)[rows], _relative(other, y)[columns]
    wrong = np.flatnonzero(np.abs(one - two) > 1e-12)
    if wrong.size:
        names = [list(own)[i] for i in wrong[:3]]
        return [f"the order of streams, nodes or meters changes balance {', '.join(names)}"]
    return same_outcome(stand, other, bench, "the order of streams, nodes or meters")


def _constants(stand: Stand) -> list[str]:
    return [f"{stand.system.name(c)} = {value:.12g}" for c, value in stand.system.fixed.items()]


def _relative(stand: Stand, x: np.ndarray) -> np.ndarray:
    return stand.equations.closure(x) / np.maximum(stand.equations.largest_term(x), 1e-300)


def same_outcome(
    stand: Stand, other: Stand, bench: Bench, what: str, units: Mapping[str, float] | None = None
) -> list[str]:
    """Run one snapshot on two builds of a network; chi-squared and every test value must agree.

    Parameters
    ----------
    stand, other : Stand
    bench : Bench
    what : str
        What differs between the two, for the message.
    units : mapping of tag to float, optional
        Factor of the readings of `other`, where its meters have other units.
    """
    case = stand.case
    if not case.tags:
        return []
    values = stated_readings(case.model, drawn(case.model, stand.state.x, bench.rng(), 1)[0])
    one = case.run(values)
    two = other.case.run({t: values[t] * (units or {}).get(t, 1.0) for t in other.case.tags})
    for result in (one, two):
        if result.table.failed:
            return [f"{what}: {result.table.failed[0]}"]
    out = []
    if abs(one.objective[0] - two.objective[0]) > 1e-9 * max(1.0, one.objective[0]):
        out.append(f"{what} changes chi-squared from {one.objective[0]:.12g} to {two.objective[0]:.12g}")
    for tag in case.tags:
        a, b = one.snapshot(0).reading(tag).z, two.snapshot(0).reading(tag).z
        if not np.isclose(a, b, rtol=1e-9, atol=1e-9, equal_nan=True):
            out.append(f"{what} changes the test value of {tag} from {a:.12g} to {b:.12g}")
            break
    return out


CHECKS = (
    Check("pure", "writing the balances changes neither network nor options", _pure),
    Check("repeatable", "writing twice gives the same balances", _repeatable),
    Check("isolated", "neither network, clock nor global random numbers are used", _isolated),
    Check("pickles", "the balances can be sent to another process", _pickles),
    Check(
        "order",
        "the order of streams, nodes and meters changes nothing",
        _order,
        ("repeatable", "derivatives", "truth"),
    ),
)
