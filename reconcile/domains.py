"""Finds plugins one by one, checks them, and names the plugin in every error."""

from __future__ import annotations

import contextlib
import importlib.util
import itertools
import re
import sys
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from importlib.metadata import EntryPoint, entry_points
from pathlib import Path
from types import ModuleType
from typing import TYPE_CHECKING, Any, Literal

import pluggy

from . import hookspecs
from .errors import InputError, Location, MissingExtra, Notice, PluginError, Problem, did_you_mean
from .hookspecs import PROJECT, Domain

if TYPE_CHECKING:
    from .network import Network
    from .system import System

RETURNED: dict[str, type] = {
    "reconcile_sources": Mapping,
    "reconcile_writers": Mapping,
    "reconcile_sections": Sequence,
}
"""What hooks must return."""

MOST_TOLD = 600
"""Characters of a plugin's message that are printed."""

MOST_DOMAINS = 1000
"""Domains that one plugin may offer."""

LONGEST_TEXT = 4000
"""Characters of a summary, a caution or a sentence."""

__all__ = ["DomainInfo", "Plugins", "load_plugins"]


@dataclass(frozen=True)
class DomainInfo:
    """A domain that is ready for use, and where it came from."""

    domain: Domain
    plugin: str
    distribution: str


@dataclass
class Plugins:
    """All plugins of one program run.

    Attributes
    ----------
    manager : pluggy.PluginManager
    domains : dict of str to DomainInfo
        By name, in alphabetical order.
    notices : list of Notice
        Plugins that were left out, and why.
    """

    manager: pluggy.PluginManager
    domains: dict[str, DomainInfo] = field(default_factory=dict)
    notices: list[Notice] = field(default_factory=list)

    def each(self, hook: str, **arguments: Any) -> Iterator[tuple[str, Any]]:
        """Call a hook of every plugin, sorted by plugin name.

        Yields
        ------
        (plugin name, what it returned)

        Raises
        ------
        PluginError
            Naming the plugin that raised.
        """
        implementations = getattr(self.manager.hook, hook).get_hookimpls()
        for implementation in sorted(implementations, key=lambda i: i.plugin_name):
            wanted = {k: arguments[k] for k in implementation.argnames if k in arguments}
            with named(implementation.plugin_name, f"hook {hook}"):
                returned = implementation.function(**wanted)
            wanted_kind = RETURNED.get(hook, object)
            if not isinstance(returned, wanted_kind):
                raise PluginError(
                    implementation.plugin_name,
                    f"hook {hook} must return a {wanted_kind.__name__.lower()}, not {type(returned).__name__}",
                )
            yield implementation.plugin_name, returned

    def domain(self, name: str) -> Domain:
        """Return a domain by its name, or say which ones there are.

        Raises
        ------
        InputError
            If it is not installed.
        """
        if name not in self.domains:
            raise InputError(
                Problem(
                    "unknown-domain",
                    f"domain {name!r} is not installed (installed: {', '.join(self.domains) or 'none'})",
                    did_you_mean(name, self.domains)
                    or "install the plugin that brings it, or name its file with --plugin",
                )
            )
        return self.domains[name].domain

    def missing(self, name: str, network: Network, chosen: Sequence[tuple[str, Any]]) -> str | None:
        """Ask the chosen domains what the case must state before a variable is there; see `Domain.missing`.

        Raises
        ------
        PluginError
            If a domain fails, or answers with something else than a sentence.
        """
        for domain, options in chosen:
            info = self.domains[domain]
            with named(info.plugin, f"domain {domain!r}, asked for {name!r},"):
                words = info.domain.missing(name, network, options)
            if words is not None and not isinstance(words, str):
                kind = type(words).__name__
                raise PluginError(
                    info.plugin, f"domain {domain!r}: missing() must return a sentence or None, not {kind}"
                )
            if words:
                return told(words)
        return None

    def build(self, network: Network, system: System, chosen: Sequence[tuple[str, Any]]) -> None:
        """Let the chosen domains write their balances, then the plugins their further faults.

        Parameters
        ----------
        network : Network
        system : System
        chosen : sequence of (domain name, checked options)
            In the order of the case file; a domain's ``after`` is honoured.

        Raises
        ------
        PluginError
            If a domain fails in a way that is not the user's.
        InputError
            If a domain refuses the case (``ValueError`` in its ``build``).
        """
        for name, options in _ordered(chosen, self.domains):
            info = self.domains[name]
            rows, columns, blocks = len(system.row_blocks), system.size, len(system.blocks)
            with system.written_by(name), named(info.plugin, f"domain {name!r}", user_errors=True):
                info.domain.build(network, system, options)
                _ = system.equations
            if len(system.row_blocks) == rows and system.size == columns:
                raise PluginError(info.plugin, f"domain {name!r} wrote neither variables nor balances")
            _check_blocks(system, blocks, info)
            _check_rows(system, rows, info)
        before = system.size
        for plugin, _ in self.each("reconcile_faults", network=network, system=system):
            if system.size != before:
                before = system.size
                with named(plugin, "hook reconcile_faults"):
                    _ = system.equations


class named:
    """Turn whatever a plugin raises into an error that names the plugin; what it prints goes to the error stream."""

    def __init__(self, plugin: str, doing: str, *, user_errors: bool = False) -> None:
        self.plugin = plugin
        self.doing = doing
        self.user_errors = user_errors
        self._aside = contextlib.redirect_stdout(sys.stderr)

    def __enter__(self) -> None:
        self._aside.__enter__()

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, _trace: object) -> Literal[False]:
        self._aside.__exit__(None, None, None)
        # A library that is not installed is for the user to install, not for the author to mend.
        if isinstance(error, (PluginError, InputError, MissingExtra)) or not isinstance(error, (Exception, SystemExit)):
            return False
        if self.user_errors and type(error) is ValueError and _is_refusal(error):
            raise InputError(
                Problem("domain-refused", f"{self.doing}: {told(str(error))}", where=Location(tag=self.plugin))
            ) from error
        raise PluginError(
            self.plugin,
            f"{self.doing} failed with {type(error).__name__}: {told(str(error))}",
            hint="report this to the author of the plugin; the program itself is well",
        ) from error


def told(text: str, most: int = MOST_TOLD) -> str:
    """One line of what a plugin says, without control characters, cut where it floods the screen."""
    line = " ".join("".join(c if c.isprintable() else " " for c in text[: 2 * most]).split())
    return line if len(line) <= most and len(text) <= 2 * most else f"{line[:most]} ..."


def _is_refusal(error: ValueError) -> bool:
    """Whether a domain refused the case: it raised itself, and not because it misused the program or the network."""
    trace = error.__traceback__
    while trace is not None and trace.tb_next is not None:
        trace = trace.tb_next
    raised_in = trace.tb_frame.f_code.co_filename if trace is not None else ""
    return Path(raised_in).parent != Path(__file__).parent and "read-only" not in str(error)


def _check_rows(system: System, first: int, info: DomainInfo) -> None:
    """Refuse rows that are no numbers, or that no balance could be."""
    import numpy as np

    equations = system.equations
    bad = ~np.isfinite(equations.rhs)
    data_rows = np.repeat(np.arange(equations.shape[0]), np.diff(equations.linear.indptr))
    bad[data_rows[~np.isfinite(equations.linear.data)]] = True
    for block in system.row_blocks[first:]:
        wrong = np.flatnonzero(bad[block.start : block.stop])
        if wrong.size:
            raise PluginError(
                info.plugin,
                f"domain {info.domain.name!r} wrote a coefficient that is not a finite number "
                f"in balance {block.names[int(wrong[0])]!r}",
            )
        if len(set(block.names)) != len(block.names):
            raise PluginError(info.plugin, f"domain {info.domain.name!r} named two balances of {block.kind!r} alike")


def _ordered(chosen: Sequence[tuple[str, Any]], known: dict[str, DomainInfo]) -> list[tuple[str, Any]]:
    """Order of writing: that of the case file, but every domain behind those it reads from."""
    waiting = list(chosen)
    done: list[tuple[str, Any]] = []
    names = {n for n, _ in chosen}
    while waiting:
        ready = [
            c for c in waiting if all(a not in names or a in {d for d, _ in done} for a in known[c[0]].domain.after)
        ]
        if not ready:
            ring = ", ".join(n for n, _ in waiting)
            raise PluginError(known[waiting[0][0]].plugin, f"domains {ring} each want to write after another")
        done.append(ready[0])
        waiting.remove(ready[0])
    return done


def load_plugins(
    files: Sequence[str | Path] = (),
    *,
    modules: Sequence[ModuleType | object] = (),
    installed: Callable[[], Sequence[EntryPoint]] | None = None,
) -> Plugins:
    """Load every installed plugin and the named files, one by one.

    Parameters
    ----------
    files : sequence of path
        Python files to load as plugins; a failure in one of these is an error, since the user asked for it.
    modules : sequence of module or object
        Plugins that are imported already (for tests and notebooks).
    installed : callable, optional
        What lists the entry points; the installed ones of group ``reconcile`` when left out.

    Returns
    -------
    Plugins
        Installed plugins that failed are left out with a notice.

    Raises
    ------
    PluginError
        If a named file cannot be used, or two plugins claim the same name.
    InputError
        If a named file does not exist.
    """
    manager = pluggy.PluginManager(PROJECT)
    manager.add_hookspecs(hookspecs)
    plugins = Plugins(manager)
    points = list(installed() if installed else entry_points(group=PROJECT))
    for point in sorted(points, key=lambda p: (p.name, p.value)):
        origin = getattr(getattr(point, "dist", None), "name", "") or ""
        try:
            _add(plugins, point.name, point.load(), f"{origin}")
        except PluginError as error:
            if error.code == "name-clash":
                raise
            plugins.notices.append(Notice("plugin-left-out", f"{error.message}; it was left out"))
        except (Exception, SystemExit) as error:
            plugins.notices.append(
                Notice(
                    "plugin-left-out",
                    f"plugin {point.name!r}{f' of {origin}' if origin else ''} could not be loaded "
                    f"({type(error).__name__}: {told(str(error))}); it was left out",
                )
            )
    for file in files:
        _add(plugins, Path(file).stem, _import_file(Path(file)), str(file))
    for module in modules:
        name = getattr(module, "__name__", type(module).__name__)
        _add(plugins, name, module, "given by the caller")
    plugins.domains = dict(sorted(plugins.domains.items()))
    return plugins


def _import_file(path: Path) -> ModuleType:
    if not path.is_file():
        raise InputError(Problem("plugin-file", f"plugin file {str(path)!r} does not exist", "check the path"))
    name = f"reconcile_plugin_file_{re.sub(r'[^A-Za-z0-9_]', '_', path.stem)}"
    spec = importlib.util.spec_from_file_location(name, path)
    if spec is None or spec.loader is None:
        raise PluginError(path.stem, f"{path} is not a Python file", code="plugin-file")
    module = importlib.util.module_from_spec(spec)
    sys.modules[name] = module
    with named(path.stem, f"loading {path}"):
        spec.loader.exec_module(module)
    return module


def _add(plugins: Plugins, name: str, module: Any, origin: str) -> None:
    """Register one plugin and its domains; a misspelt hook or an unusable domain is an error of that plugin."""
    manager = plugins.manager
    if manager.has_plugin(name):
        raise PluginError(name, f"two plugins are named {name!r}", code="name-clash", hint="rename or uninstall one")
    misspelt = [
        a
        for a in vars(module)
        if a.startswith("reconcile_")
        and callable(getattr(module, a, None))
        and getattr(getattr(module, a), f"{PROJECT}_impl", None) is not None
        and not hasattr(hookspecs, a)
    ]
    if misspelt:
        hint = did_you_mean(misspelt[0], [h for h in vars(hookspecs) if h.startswith("reconcile_")])
        raise PluginError(name, f"there is no hook {misspelt[0]!r}", code="unknown-hook", hint=hint)
    with named(name, "registering"):
        manager.register(module, name)
    try:
        manager.check_pending()
        if not manager.get_hookcallers(module):
            raise PluginError(
                name, "it implements no hook", code="no-hooks", hint="mark functions with @reconcile.hookimpl"
            )
        _add_domains(plugins, name, module, origin)
    except Exception:
        manager.unregister(module)
        raise


def _add_domains(plugins: Plugins, name: str, module: Any, origin: str) -> None:
    hook = getattr(module, "reconcile_domains", None)
    if hook is None:
        return
    with named(name, "hook reconcile_domains"):
        offered = list(itertools.islice(hook(), MOST_DOMAINS + 1))
    if len(offered) > MOST_DOMAINS:
        raise PluginError(name, f"reconcile_domains offers more than {MOST_DOMAINS} domains")
    for kind in offered:
        if not (isinstance(kind, type) and issubclass(kind, Domain)):
            raise PluginError(name, f"reconcile_domains offered {kind!r}, which is no subclass of reconcile.Domain")
        if not re.fullmatch(r"[a-z][a-z0-9_]*", kind.name or ""):
            raise PluginError(name, f"domain class {kind.__name__} needs a lower-case name, got {kind.name!r}")
        _check_texts(name, kind)
        if kind.name in plugins.domains:
            other = plugins.domains[kind.name]
            raise PluginError(
                name,
                f"domain {kind.name!r} is offered by both {other.plugin!r} ({other.distribution or 'unknown origin'}) "
                f"and {name!r} ({origin or 'unknown origin'})",
                code="name-clash",
                hint="uninstall one of the two",
            )
        with named(name, f"making domain {kind.name!r}"):
            plugins.domains[kind.name] = DomainInfo(kind(), name, origin)


def _check_texts(plugin: str, kind: type[Domain]) -> None:
    """Refuse a domain whose attributes are not what the contract says, before anything prints or reads them."""
    texts: list[tuple[str, Any]] = [(a, getattr(kind, a)) for a in ("version", "summary", "caution")]
    for attribute in ("after", "forgotten"):
        values = getattr(kind, attribute)
        if not isinstance(values, (tuple, list)) or len(values) > MOST_DOMAINS:
            raise PluginError(plugin, f"{attribute} of domain {kind.name!r} must be a short tuple of texts")
        texts += [(attribute, v) for v in values]
    for attribute, text in texts:
        if not isinstance(text, str):
            raise PluginError(plugin, f"{attribute} of domain {kind.name!r} must be a text, not {type(text).__name__}")
        if len(text) > LONGEST_TEXT:
            raise PluginError(
                plugin, f"{attribute} of domain {kind.name!r} has {len(text)} characters; {LONGEST_TEXT} are the most"
            )
    for attribute in ("options", "stream_options", "node_options"):
        model = getattr(kind, attribute)
        if model is not None and not (isinstance(model, type) and hasattr(model, "model_validate")):
            raise PluginError(plugin, f"{attribute} of domain {kind.name!r} must be a pydantic model or None")


def _check_blocks(system: System, first: int, info: DomainInfo) -> None:
    """Refuse variables whose unit is no text, and faults whose sentences cannot be filled."""
    words = {"item": "", "size": "", "unit": "", "direction": ""}
    for block in system.blocks[first:]:
        owner = f"domain {info.domain.name!r}"
        if not isinstance(block.unit, str):
            raise PluginError(
                info.plugin, f"{owner} gives {block.quantity!r} a unit that is no text: {block.unit!r:.80}"
            )
        if block.fault is None:
            continue
        for key, text in (("says", block.fault.says), ("separate", block.fault.separate)):
            try:
                text.format(**words)
            except Exception as error:
                raise PluginError(
                    info.plugin,
                    f"{owner} has a fault {block.quantity!r} whose {key}= cannot be filled: {told(str(text), 200)}",
                    hint="there are {item}, {size}, {unit} and {direction}",
                ) from error
            if len(text) > LONGEST_TEXT:
                raise PluginError(
                    info.plugin, f"{owner}: {key}= of fault {block.quantity!r} has {len(text)} characters"
                )
