"""Hostile plugins, through the command line: never a traceback, always named, exit code 4."""

from __future__ import annotations

import pytest
from click.testing import CliRunner

from reconcile.cli import main

HEAD = """
import numpy as np
from pydantic import BaseModel, ConfigDict, field_validator
from reconcile import Domain, hookimpl

class Options(BaseModel):
    model_config = ConfigDict(extra="forbid")
    unit: str = "1/h"

class Counts(Domain):
    name = "counts"
    version = "1"
    options = Options
    def build(self, network, system, options):
        flow = system.variables("count", network.streams, unit=options.unit)
        system.require(network.incidence @ flow == 0, names=network.nodes, kind="count", unit=options.unit)
"""
HOOK = """
@hookimpl
def reconcile_domains():
    return [Counts]
"""
CASE = """
reconcile: 1
title: Counted things (invented)
domains: {counts: {}}
streams: {a: outside -> tank, b: tank -> outside}
meters:
  A: {reads: a.count, unit: 1/h, sigma: 1 1/h}
  B: {reads: b.count, unit: 1/h, sigma: 1 1/h}
readings: readings.csv
"""


def overriding(body):
    return HEAD + f"\nclass Hostile(Counts):\n{body}\nCounts = Hostile\n" + HOOK


def build(*lines):
    return overriding(
        "    def build(self, network, system, options):\n" + "".join(f"        {line}\n" for line in lines)
    )


@pytest.fixture
def run(write_case):
    def run(source, *words, command="run"):
        case = write_case(CASE, "A,B\n10,10.5\n")
        plugin = case.parent / "guest.py"
        plugin.write_text(source, encoding="utf-8")
        done = CliRunner().invoke(main, [command, str(case), "--plugin", str(plugin), *words])
        # Whatever is no deliberate exit would be a traceback on a terminal.
        assert done.exception is None or isinstance(done.exception, SystemExit), repr(done.exception)
        assert "Traceback" not in done.output + done.stderr
        return done

    return run


def test_the_guest_works_before_it_turns_hostile(run):
    done = run(HEAD + HOOK)
    assert done.exit_code == 0, done.stderr
    assert done.stdout.startswith("Counted things")


SUPER = "Counts.__mro__[1].build(self, network, system, options)"
HOSTILE = {
    "raises at import": ("raise RuntimeError('no such luck')", "no such luck"),
    "asks for the exit at import": ("import sys; sys.exit(3)", "SystemExit"),
    "is no Python": ("def (", "SyntaxError"),
    "imports what is not there": ("import no_such_module_anywhere", "no_such_module_anywhere"),
    "has no hook": (HEAD, "implements no hook"),
    "misspells a hook": (HEAD + HOOK.replace("reconcile_domains", "reconcile_domain"), "did you mean 'reconcile_domains'"),
    "has a hook with other arguments": (HEAD + HOOK.replace("domains()", "domains(everything)"), "everything"),
    "raises in its hook": (HEAD + HOOK.replace("return [Counts]", "return 1 / 0"), "ZeroDivisionError"),
    "offers what is no domain": (HEAD + HOOK.replace("[Counts]", "[dict]"), "no subclass"),
    "offers nothing that can be listed": (HEAD + HOOK.replace("[Counts]", "7"), "TypeError"),
    "offers endlessly": (HEAD + HOOK.replace("return [Counts]", "import itertools; return itertools.repeat(Counts)"), "offers"),
    "cannot be made": (overriding("    def __init__(self): raise OSError('disk full')"), "disk full"),
    "takes the name of another": (HEAD.replace('"counts"', '"fluid"') + HOOK, "offered by both"),
    "has a version that is no text": (overriding("    version = object()"), "version"),
    "has options that are no model": (overriding("    options = dict"), "options"),
    "raises in its options": (
        HEAD.replace('unit: str = "1/h"', 'unit: str = "1/h"\n    @field_validator("unit", mode="before")\n'
        "    @classmethod\n    def look(cls, v): raise RuntimeError('options broke')\n"
        "    model_config = ConfigDict(extra='forbid', validate_default=True)") + HOOK,
        "options broke",
    ),
    "raises in build": (build("raise RuntimeError('broke inside')"), "broke inside"),
    "recurses without end": (build("self.build(network, system, options)"), "RecursionError"),
    "asks for the exit in build": (build("raise SystemExit(0)"), "SystemExit"),
    "writes nothing": (build("return 'balances'"), "wrote neither"),
    "writes what is no number": (
        build("v = system.variables('count', network.streams, unit='1/h')", "system.require(v * np.nan == 0, kind='count')"),
        "not a finite number",
    ),
    "has a start that is no number": (
        build("v = system.variables('count', network.streams, unit='1/h', start='high')"), "high",
    ),
    "has a unit that is no text": (
        build("v = system.variables('count', network.streams, unit=None)",
              "system.require(network.incidence @ v == 0, names=network.nodes, kind='count', unit='1/h')"),
        "unit",
    ),
    "mutates the network": (build("network.source[0] = 0", SUPER), "read-only"),
    "replaces the network": (build("network.nodes = ()", SUPER), "FrozenInstanceError"),
    "mutates the options of the network": (build("network.node_options['tank'] = {}", SUPER), "TypeError"),
    "names a thousand balances alike": (
        build("v = system.variables('count', network.streams, unit='1/h')",
              "system.require(np.ones((1000, 2)) @ v == 0, names=['x'] * 1000, kind='count')"),
        "alike",
    ),
    "a function of it raises": (
        build(SUPER, "v = system.find('count')",
              "w = system.variables('other', network.streams, unit='1')",
              "def f(x): raise RuntimeError('table ended')",
              "system.require(w - system.apply(f, v, derivatives=f) == 0, kind='law', unit='1')"),
        "table ended",
    ),
    "a function of it gives nonsense": (
        build(SUPER, "v = system.find('count')",
              "w = system.variables('other', network.streams, unit='1')",
              "system.require(w - system.apply(lambda x: 'abc', v, derivatives=lambda x: None) == 0, kind='law', unit='1')"),
        "counts",
    ),
    "the sentence of its fault cannot be filled": (
        build(SUPER, "t = system.faults('theft', network.nodes, unit='1/h', says='{nothing}', separate='{0}')",
              "system.require(t - t == 0, kind='nothing', unit='1/h')"),
        "theft",
    ),
    "a further fault raises": (HEAD + HOOK + "\n@hookimpl\ndef reconcile_faults(network, system):\n    raise KeyError('lost')\n", "reconcile_faults"),
    "its sources raise": (HEAD + HOOK + "\n@hookimpl\ndef reconcile_sources():\n    raise KeyError('lost')\n", "reconcile_sources"),
    "its sources are no mapping": (HEAD + HOOK + "\n@hookimpl\ndef reconcile_sources():\n    return 7\n", "reconcile_sources"),
}  # fmt: skip


@pytest.mark.parametrize("how", HOSTILE)
def test_a_hostile_plugin_is_named_and_the_program_stands(run, how):
    source, says = HOSTILE[how]
    done = run(source)
    assert done.exit_code == 4, (done.exit_code, done.stdout[-500:], done.stderr)
    # A law that fails while readings are adjusted is named by its domain.
    assert "guest" in done.stderr or "plugin 'counts'" in done.stderr
    assert says in done.stderr
    assert len(done.stderr) < 2000


def test_a_plugin_that_warns_and_prints_cannot_spoil_the_json(run):
    import json

    done = run(build("print('noise')", SUPER), "--json")
    assert done.exit_code == 0
    json.loads(done.stdout)


@pytest.mark.parametrize("attribute", ["caution", "summary"])
@pytest.mark.parametrize("command", ["check", "coverage", "run"])
def test_a_gigantic_text_is_refused_naming_the_plugin(run, command, attribute):
    done = run(overriding(f"    {attribute} = 'Beware. ' * 2_000_000"), command=command)
    assert done.exit_code == 4
    assert "guest" in done.stderr
    assert "16000000 characters" in done.stderr
    assert len(done.stdout + done.stderr) < 2000


def test_a_unit_that_is_none_stands_at_the_place_of_the_domain(run):
    done = run(
        build(
            "v = system.variables('count', network.streams, unit='furlongs')",
            "system.require(network.incidence @ v == 0, names=network.nodes, kind='count', unit='1/h')",
        )
    )
    assert done.exit_code == 2
    assert "case.yaml:4:1" in done.stderr
    assert "'furlongs'" in done.stderr


def test_a_gigantic_message_is_cut(run):
    done = run(build("raise RuntimeError('no ' * 1_000_000)"))
    assert done.exit_code == 4
    assert "guest" in done.stderr
    assert len(done.stderr) < 5000


def test_a_message_of_many_lines_and_controls_is_one_plain_line(run):
    done = run(build(r"raise RuntimeError('one\n\x1b[31mtwo')"))
    assert done.exit_code == 4
    assert len(done.stderr.strip().splitlines()) == 1
    assert "\x1b" not in done.stderr


def test_hundreds_of_faults_that_look_alike_do_not_flood_the_screen(run):
    done = run(
        build(
            "v = system.variables('count', network.streams, unit='1/h')",
            "t = system.faults('theft', [f'thief_{i}' for i in range(400)], unit='1/h', says='{size} at {item}')",
            "system.require(network.incidence @ v - t.sum() == 0, names=network.nodes, kind='count', unit='1/h')",
        )
    )
    assert done.exit_code == 0
    assert len(done.stdout) < 50_000


def test_names_that_collide_are_refused_naming_both(run, write_case):
    two = HEAD + "\nclass Others(Counts):\n    name = 'others'\n" + HOOK.replace("[Counts]", "[Counts, Others]")
    case = write_case(CASE.replace("{counts: {}}", "{counts: {}, others: {}}"), "A,B\n10,10.5\n")
    (case.parent / "guest.py").write_text(two, encoding="utf-8")
    done = CliRunner().invoke(main, ["run", str(case), "--plugin", str(case.parent / "guest.py")])
    assert done.exit_code == 4
    assert "'counts'" in done.stderr
    assert "'others'" in done.stderr
    assert "a.count" in done.stderr
