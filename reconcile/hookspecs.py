"""The whole plugin contract, on one page, in the order of a run.

A domain is a class with a name, the options it understands, and one method that writes balances. A plugin is
a module (installed under the entry-point group ``reconcile``, or a file named with ``--plugin``) that
implements one or more of the hooks below with `hookimpl`; all of them are optional.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, ClassVar

import pluggy

if TYPE_CHECKING:
    from pydantic import BaseModel

    from .network import Network
    from .readings.table import ReadingsTable
    from .results import Result
    from .system import System

__all__ = ["Domain", "Section", "hookimpl"]

PROJECT = "reconcile"
hookspec = pluggy.HookspecMarker(PROJECT)
hookimpl = pluggy.HookimplMarker(PROJECT)


# ------------------------------------------------------------------ what a domain is


class Domain:
    """Base of every domain: a subject whose balances the program can use.

    Attributes
    ----------
    name : str
        Name under ``domains:`` in a case file; lower case, unique among the installed domains.
    version : str
        Version of the domain, stamped on every result.
    summary : str
        One line for ``reconcile domains``.
    options : type of pydantic model, or None
        What stands under ``domains: {name: {...}}``; None means no options.
    stream_options, node_options : type of pydantic model, or None
        Extra keys of streams and nodes that this domain reads with ``network.of_streams(key)``.
    after : tuple of str
        Domains that must write first when both are used, because this one reads their variables.
    needs_streams : bool
        Whether the domain has nothing to say about a case without streams.
    caution : str
        What the trade must be told with every result; printed and exported.
    forgotten : tuple of str
        Streams that people of this trade usually forget to draw.
    """

    name: ClassVar[str] = ""
    version: ClassVar[str] = "0"
    summary: ClassVar[str] = ""
    options: ClassVar[type[BaseModel] | None] = None
    stream_options: ClassVar[type[BaseModel] | None] = None
    node_options: ClassVar[type[BaseModel] | None] = None
    after: ClassVar[tuple[str, ...]] = ()
    needs_streams: ClassVar[bool] = True
    caution: ClassVar[str] = ""
    forgotten: ClassVar[tuple[str, ...]] = ()

    def build(self, network: Network, system: System, options: Any) -> None:
        """Write the balances and the possible faults of this domain.

        Parameters
        ----------
        network : Network
            Read-only.
        system : System
            Declare with ``system.variables(...)`` and ``system.faults(...)``, write with
            ``system.require(left == right, ...)``.
        options : pydantic model or None
            The checked options of this domain.

        Raises
        ------
        ValueError
            For options that contradict the network; the message is shown to the user with the domain's name.
        """
        raise NotImplementedError

    def missing(self, name: str, network: Network, options: Any) -> str | None:
        """Say what the case must state before a variable is there; asked when a case reads one that is not.

        Parameters
        ----------
        name : str
            Name that no domain declared, e.g. ``offgas.oxygen.fraction``.
        network : Network
            Read-only.
        options : pydantic model or None
            The checked options of this domain.

        Returns
        -------
        str or None
            One sentence: what is not stated, and what to write. None where this domain knows nothing of that name.
        """
        return None


@dataclass(frozen=True)
class Section:
    """A section that a plugin adds to the report."""

    title: str
    text: str


# ------------------------------------------------------------------ 1. read a case


@hookspec
def reconcile_domains() -> Sequence[type[Domain]]:  # type: ignore[empty-body]
    """Offer domains to case files.

    Called once, when plugins are loaded.

    Returns
    -------
    sequence of Domain subclasses
    """


# ------------------------------------------------------------------ 2. read readings


@hookspec
def reconcile_sources() -> Mapping[str, Callable[..., ReadingsTable]]:  # type: ignore[empty-body]
    """Offer readers of measured data.

    Called when readings are opened.

    Returns
    -------
    mapping of str to callable
        File suffix (``.abc``) or URL scheme (``abc:``) to ``reader(target, **options) -> ReadingsTable``.
    """


# ------------------------------------------------------------------ 3. write the system


@hookspec
def reconcile_faults(network: Network, system: System) -> None:
    """Offer further possible faults, after all domains have written their balances.

    Parameters
    ----------
    network : Network
        Read-only.
    system : System
        May be given variables, faults and balances; balances that stand there are not to be changed.
    """


# ------------------------------------------------------------------ 4. report and export


@hookspec
def reconcile_sections(result: Result) -> Sequence[Section]:  # type: ignore[empty-body]
    """Offer sections for the report.

    Parameters
    ----------
    result : Result
        Read-only.

    Returns
    -------
    sequence of Section
    """


@hookspec
def reconcile_writers() -> Mapping[str, Callable[[Result, str], None]]:  # type: ignore[empty-body]
    """Offer further output formats.

    Returns
    -------
    mapping of str to callable
        File suffix (``.abc``) to ``writer(result, path)``; the file is moved to its name once it is whole.
    """
