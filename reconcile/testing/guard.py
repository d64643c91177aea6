"""Watches what a domain must not touch while it writes balances: network, clock, global random numbers."""

from __future__ import annotations

import contextlib
import datetime
import random
import socket
import sys
import time
from collections.abc import Callable, Iterator
from typing import Any
from unittest import mock

import numpy as np

__all__ = ["watched"]

CLOCKS = ("time", "time_ns", "monotonic", "perf_counter", "localtime", "gmtime", "ctime", "strftime")
WIRES = ("socket", "create_connection", "getaddrinfo")


@contextlib.contextmanager
def watched(package: str) -> Iterator[list[str]]:
    """Record forbidden uses, in words, while the block runs.

    Parameters
    ----------
    package : str
        Import package of the domain; names that its modules imported earlier are watched, too.

    Yields
    ------
    list of str
        Complete when the block has ended.
    """
    seen: list[str] = []
    real_datetime = datetime.datetime

    def noting(real: Callable[..., Any], what: str) -> Callable[..., Any]:
        def called(*arguments: Any, **named: Any) -> Any:
            seen.append(what)
            return real(*arguments, **named)

        return called

    class Dated(real_datetime):  # type: ignore[valid-type,misc]
        @classmethod
        def now(cls, tz: Any = None) -> Any:
            seen.append("the clock (datetime.now)")
            return real_datetime.now(tz)

        utcnow = today = now

    replaced: dict[int, Any] = {id(real_datetime): Dated}
    places: list[tuple[Any, str]] = []
    for module, names, what in ((time, CLOCKS, "the clock"), (socket, WIRES, "the network")):
        for name in names:
            real = getattr(module, name)
            replaced[id(real)] = noting(real, f"{what} ({module.__name__}.{name})")
            places.append((module, name))
    for name, module in list(sys.modules.items()):
        if name == package or name.startswith(package + "."):
            places += [(module, key) for key, value in list(vars(module).items()) if id(value) in replaced]
    before = random.getstate(), _numpy_state()
    with contextlib.ExitStack() as stack:
        stack.enter_context(mock.patch.object(datetime, "datetime", Dated))
        for module, key in places:
            stack.enter_context(mock.patch.object(module, key, replaced[id(getattr(module, key))]))
        yield seen
    if random.getstate() != before[0]:
        seen.append("global random numbers (random)")
    if _numpy_state() != before[1]:
        seen.append("global random numbers (numpy.random)")


def _numpy_state() -> tuple[bytes, int, int, float]:
    """Keys and position: a few draws move the position only."""
    _, keys, position, has_gauss, gauss = np.random.get_state()  # noqa: NPY002
    return np.asarray(keys).tobytes(), int(position), int(has_gauss), float(gauss)
