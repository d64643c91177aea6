"""Domains may say what a case must state before a variable is there; one that fails at it is named."""

from __future__ import annotations

import pytest
from test_hostile_plugins import CASE, overriding

import reconcile
from reconcile.errors import InputError, PluginError


@pytest.fixture
def load(write_case):
    def load(body):
        case = write_case(CASE.replace("a.count", "a.share"))
        plugin = case.parent / "guest.py"
        plugin.write_text(
            overriding(f"    def missing(self, name, network, options):\n        {body}\n"), encoding="utf-8"
        )
        return reconcile.load_case(case, plugins=[plugin])

    return load


def test_the_sentence_of_a_domain_is_the_hint(load):
    with pytest.raises(InputError) as caught:
        load('return f"{name} needs share: true on {network.streams[0]}, in {options.unit}"')
    (problem,) = caught.value.problems
    assert problem.hint == "a.share needs share: true on a, in 1/h"
    assert problem.where.line == 7


def test_without_an_answer_the_nearest_name_is_told(load):
    with pytest.raises(InputError, match="a has: count"):
        load("return None")


@pytest.mark.parametrize(
    ("body", "says"),
    [
        ("return 3", "missing() must return a sentence or None, not int"),
        ('raise KeyError("x")', "asked for 'a.share', failed with KeyError"),
        ("network.streams.append(name)", "failed with AttributeError"),
    ],
)
def test_a_domain_that_fails_at_it_is_named(load, body, says):
    with pytest.raises(PluginError) as caught:
        load(body)
    assert says in str(caught.value)
    assert "guest" in str(caught.value)
