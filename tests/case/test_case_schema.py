"""The JSON Schema that editors check a case file with."""

import json
from importlib import import_module
from pathlib import Path

import jsonschema
import pytest

from reconcile.case import DomainModels, json_schema, read_case
from reconcile.case.yaml_source import read_yaml

ROOT = Path(__file__).parents[2]


@pytest.fixture
def validator(models):
    schema = json.loads(json.dumps(json_schema(models)))
    jsonschema.Draft202012Validator.check_schema(schema)
    return jsonschema.Draft202012Validator(schema)


GOOD = {
    "reconcile": 1,
    "title": "x",
    "domains": {"water": {"unit": "L/min"}, "blend": None, "bare": {}},
    "nodes": {"header": {"stores": True}, "n": None},
    "streams": {"s": "outside -> header", "t": {"path": "header -> n", "density": 2.0, "grade": {"NO": 1}}},
    "meters": {
        "a": {"reads": "s.flow", "unit": "L/min", "sigma": ["1 % of reading", "0.1 L/min"]},
        "b": {"reads": "s.flow", "unit": "L/min", "expanded": "1 L/min", "coverage": 2},
    },
    "known": {"s.x": "3 L", "s.y": {"value": "3 L", "sigma": "1 L"}, "s.z": 3},
    "shared_errors": {
        "c": {"sigma": {"a": "1 L/min", "b": "1 L/min"}, "meters": ["a", "b"], "correlations": [["a", "b", 0.5]]}
    },
    "bounds": {"s.flow": "at least 0 L/min"},
    "design": {"s.flow": "3 L/min"},
    "figures": {"f": "s.flow / t.flow"},
    "readings": "r.csv",
    "settings": {"level": 0.05, "max_faults": None, "percent_at": "reading"},
}


def test_a_right_case_passes(validator):
    assert list(validator.iter_errors(GOOD)) == []
    assert list(validator.iter_errors({**GOOD, "streams": "streams.csv", "meters": "meters.xlsx"})) == []


@pytest.mark.parametrize(
    ("section", "value"),
    [
        ("reconcile", 2),
        ("titel", "x"),
        ("domains", {"zzz": {}}),
        ("domains", {"water": {}}),
        ("domains", {"water": {"unit": "L", "leak": True}}),
        ("domains", {"bare": {"a": 1}}),
        ("streams", {"s": "outside"}),
        ("streams", {"s": {"density": 1}}),
        ("streams", {"s": {"path": "a -> b", "colour": 1}}),
        ("streams", {"s": {"path": "a -> b", "density": -1}}),
        ("nodes", {"n": {"store": True}}),
        ("meters", {"a": {"unit": "L"}}),
        ("meters", {"a": {"reads": "a.b", "sgima": "1 L"}}),
        ("known", {"a.b": {"sigma": "1 L"}}),
        ("shared_errors", {"c": {"sigma": "1 L", "meters": ["a"]}}),
        ("settings", {"level": 2}),
        ("settings", {"percent_at": "never"}),
    ],
)
def test_a_wrong_case_does_not(validator, section, value):
    assert list(validator.iter_errors({**GOOD, section: value}))


def test_keys_are_described_for_editors(models):
    schema = json_schema(models)
    assert "GUM" in schema["$defs"]["Meter"]["properties"]["accuracy"]["description"]
    assert all(p.get("description") for p in schema["$defs"]["Settings"]["properties"].values())


def test_without_domains_their_parts_are_open():
    validator = jsonschema.Draft202012Validator(json_schema())
    assert list(validator.iter_errors({**GOOD, "domains": {"zzz": {"a": 1}}, "nodes": {"n": {"b": 2}}})) == []


def models_in_the_tree():
    """Models of every domain under plugins/, installed or not yet."""
    found = {}
    for package in sorted((ROOT / "plugins").glob("reconcile_*/__init__.py")):
        for kind in import_module(package.parent.name).reconcile_domains():
            found[kind.name] = DomainModels(kind.options, kind.stream_options, kind.node_options, kind.needs_streams)
    return found


def test_the_schema_and_the_reader_agree_on_our_domains_and_data_sets(tmp_path):
    ours = models_in_the_tree()
    schema = json_schema(ours)
    jsonschema.Draft202012Validator.check_schema(schema)
    validator = jsonschema.Draft202012Validator(schema)
    own = tmp_path / "case.yaml"
    own.write_text(
        "reconcile: 1\ndomains: {fluid: {unit: L/min}}\nnodes: {n: {stores: true}}\nstreams: {s: outside -> n}\n"
    )
    for file in [own, *sorted((ROOT / "datasets").glob("*/case.yaml"))]:
        read_case(file, option_models=ours)
        assert list(validator.iter_errors(read_yaml(file)[0])) == [], file
