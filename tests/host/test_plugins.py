"""The plugin host: plugins are loaded one by one, and the one that fails is named."""

from __future__ import annotations

import types
from importlib.metadata import EntryPoint

import numpy as np
import pytest

import reconcile
from reconcile import Domain, Network, System, hookimpl
from reconcile.domains import load_plugins

NETWORK = Network.from_paths({"a": ("outside", "tank"), "b": ("tank", "outside")})


def plugin(name, *domains, **hooks):
    module = types.ModuleType(name)

    @hookimpl
    def reconcile_domains():
        return list(domains)

    module.reconcile_domains = reconcile_domains
    for key, value in hooks.items():
        setattr(module, key, value)
    return module


def domain(name_, build):
    return type(name_.title(), (Domain,), {"name": name_, "build": build})


def simple(self, network, system, options):
    flow = system.variables("count", network.streams, unit="1/h")
    system.require(network.incidence @ flow == 0, names=network.nodes, kind="count")


def test_the_installed_domains_are_found_by_entry_point():
    found = load_plugins()
    assert "fluid" in found.domains
    assert found.domains["fluid"].distribution == "reconcile-flows"
    assert list(found.domains) == sorted(found.domains)


def test_a_broken_installed_plugin_is_left_out_and_named():
    points = [
        EntryPoint("works", "reconcile_fluid", "reconcile"),
        EntryPoint("gone", "no_such_module_anywhere", "reconcile"),
    ]
    found = load_plugins(installed=lambda: points)
    assert "fluid" in found.domains
    assert len(found.notices) == 1
    assert "'gone'" in found.notices[0].message
    assert "no_such_module_anywhere" in found.notices[0].message


def test_a_misspelt_hook_is_refused_with_the_nearest_name():
    module = plugin("typo", domain("counts", simple))

    @hookimpl
    def reconcile_domain():
        return []

    module.reconcile_domain = reconcile_domain
    with pytest.raises(reconcile.PluginError, match=r"reconcile_domain.*did you mean 'reconcile_domains'"):
        load_plugins(modules=[module])


def test_two_plugins_with_one_domain_name_are_refused_naming_both():
    with pytest.raises(reconcile.PluginError, match=r"'one'.*'two'") as caught:
        load_plugins(modules=[plugin("one", domain("counts", simple)), plugin("two", domain("counts", simple))])
    assert caught.value.code == "name-clash"


def test_what_is_no_domain_is_refused():
    with pytest.raises(reconcile.PluginError, match="no subclass"):
        load_plugins(modules=[plugin("odd", dict)])
    with pytest.raises(reconcile.PluginError, match="lower-case name"):
        load_plugins(modules=[plugin("odd", domain("Shouting Name", simple))])


def build(kind, **more):
    found = load_plugins(modules=[plugin("guest", kind, **more)])
    system = System()
    found.build(NETWORK, system, [(kind.name, None)])
    return system


def raises(self, network, system, options):
    raise RuntimeError("something broke inside")


def refuses(self, network, system, options):
    raise ValueError("stream 'a' needs a density")


def nonsense(self, network, system, options):
    flow = system.variables("count", network.streams, unit="1/h")
    system.require(np.array([[np.nan, 1.0]]) @ flow == 0, kind="count")


def writes_nothing(self, network, system, options):
    return "balances"


def mutates(self, network, system, options):
    network.source[0] = 0
    simple(self, network, system, options)


def wrong_size(self, network, system, options):
    flow = system.variables("count", network.streams, unit="1/h")
    system.require(np.ones((2, 5)) @ flow == 0, kind="count")


@pytest.mark.parametrize(
    ("kind", "says"),
    [
        (raises, "something broke inside"),
        (nonsense, "not a finite number"),
        (writes_nothing, "wrote neither"),
        (mutates, "read-only"),
    ],
)
def test_a_hostile_domain_is_named(kind, says):
    with pytest.raises(reconcile.PluginError, match="guest") as caught:
        build(domain("hostile", kind))
    assert says in str(caught.value)


def test_a_domain_that_refuses_the_case_is_the_users_business():
    with pytest.raises(reconcile.InputError, match="needs a density") as caught:
        build(domain("careful", refuses))
    assert caught.value.exit_code == 2


def test_a_mistake_in_matrix_sizes_names_the_domain():
    with pytest.raises(reconcile.ReconcileError, match="clumsy"):
        build(domain("clumsy", wrong_size))


def test_huge_output_is_taken():
    def many(self, network, system, options):
        flow = system.variables("count", [f"s{i}" for i in range(200_000)], unit="1/h")
        system.require(flow == 0, kind="count")

    assert build(domain("huge", many)).equations.shape == (200_000, 200_000)


def test_equal_variable_names_collide_naming_both_domains():
    found = load_plugins(modules=[plugin("one", domain("first", simple)), plugin("two", domain("second", simple))])
    with pytest.raises(reconcile.ReconcileError, match="'first' and 'second'"):
        found.build(NETWORK, System(), [("first", None), ("second", None)])


def test_domains_write_in_the_order_they_need():
    order = []

    def note(name):
        def build(self, network, system, options):
            order.append(name)
            system.variables(name, network.streams, unit="1/h")

        return build

    late = type("Late", (Domain,), {"name": "late", "build": note("late"), "after": ("early",)})
    early = type("Early", (Domain,), {"name": "early", "build": note("early")})
    found = load_plugins(modules=[plugin("both", late, early)])
    found.build(NETWORK, System(), [("late", None), ("early", None)])
    assert order == ["early", "late"]


def test_further_faults_come_from_a_hook():
    @hookimpl
    def reconcile_faults(network, system):
        system.faults("theft", ["tank"], unit="1/h", says="{size} taken from {item}")

    system = build(domain("counts", simple), reconcile_faults=reconcile_faults)
    assert "tank.theft" in system.names()


def test_a_hook_that_raises_is_named():
    @hookimpl
    def reconcile_faults(network, system):
        raise KeyError("lost")

    with pytest.raises(reconcile.PluginError, match=r"guest.*reconcile_faults"):
        build(domain("counts", simple), reconcile_faults=reconcile_faults)


def test_errors_survive_pickling():
    import pickle

    from reconcile.errors import Location, Problem

    for error in (
        reconcile.PluginError("guest", "broke", hint="fix it"),
        reconcile.InputError([Problem("code", "message", "hint", Location("f", 1, 2))]),
        reconcile.SolveError("no"),
        reconcile.MissingExtra("jinja2", "report", "the report"),
    ):
        again = pickle.loads(pickle.dumps(error))
        assert str(again) == str(error)
        assert again.code == error.code
