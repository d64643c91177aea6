"""Whole case files: what is read, and every mistake at its place."""

import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

from reconcile.case import BoundSpec, KnownSpec, Settings, SigmaPart, SigmaSpec, StreamSpec, read_case
from reconcile.errors import InputError

LOOP = """\
reconcile: 1
title: Two-branch cooling loop (invented)
domains:
  water: {unit: L/min}
nodes:
  collector: {stores: true}
streams:
  supply:   outside -> header
  branch_a: header -> collector
  branch_b: {path: header -> collector}
  return:   collector -> outside
meters:
  FT-1: {reads: supply.flow,   unit: L/min, sigma: 1 % of reading, description: by the pump}
  FT-2: {reads: branch_a.flow, unit: m3/h,  sigma: 0.03 m3/h, fault_rate: 0.1}
  FT-3: {reads: branch_a.flow + branch_b.flow, unit: L/min, accuracy: 2 % of span, span: 0 to 40 L/min}
  FT-4: {reads: return.flow, unit: L/min, expanded: 1.2 L/min, coverage: 2, reading: {column: 4}}
known:
  branch_b.resistance: {value: 3.2 mmHg min/L, sigma: 0.1 mmHg min/L}
  branch_a.resistance: 3 mmHg min/L
shared_errors:
  bench_reference: {sigma: 1 % of reading, meters: [FT-1, FT-4]}
bounds:
  branch_a.flow: at least 0 L/min
  branch_b.flow: 0 to 2.4 m3/h
  return.flow: at least 1 L/min and at most 40 L/min
  supply.flow: at most 40 L/min
design: {supply.flow: 30 L/min}
figures:
  split: branch_a.flow / supply.flow
readings: readings.csv
settings: {level: 0.01, max_faults: 3}
"""


def test_a_whole_case(read):
    spec = read(LOOP, head=False)
    assert spec.title == "Two-branch cooling loop (invented)"
    assert spec.path.name == "case.yaml"
    assert spec.domains == {"water": {"unit": "L/min"}}
    assert spec.nodes == {"header": {}, "collector": {"stores": True}}
    assert spec.streams["branch_b"] == StreamSpec("branch_b", "header", "collector", {})
    assert spec.streams["supply"].source == "outside"
    assert list(spec.streams) == ["supply", "branch_a", "branch_b", "return"]
    assert spec.meters["FT-3"].reads == (("branch_a.flow", 1.0), ("branch_b.flow", 1.0))
    assert spec.meters["FT-1"].options == {"description": "by the pump"}
    assert spec.meters["FT-2"].options == {"fault_rate": 0.1}
    assert spec.meters["FT-4"].options == {"reading": {"column": 4}}
    prior = SigmaSpec((SigmaPart("absolute", 0.1, "0.1 mmHg min/L", "sigma"),))
    assert spec.known["branch_b.resistance"] == KnownSpec("branch_b.resistance", 3.2, "mmHg min/L", prior)
    assert spec.known["branch_a.resistance"] == KnownSpec("branch_a.resistance", 3.0, "mmHg min/L", None)
    assert spec.shared_errors["bench_reference"].meters == ("FT-1", "FT-4")
    assert [s.relative for s in spec.shared_errors["bench_reference"].sigma] == [0.01, 0.01]
    assert spec.shared_errors["bench_reference"].correlations is None
    assert spec.bounds == {
        "branch_a.flow": BoundSpec((0.0, "L/min"), None),
        "branch_b.flow": BoundSpec((0.0, "m3/h"), (2.4, "m3/h")),
        "return.flow": BoundSpec((1.0, "L/min"), (40.0, "L/min")),
        "supply.flow": BoundSpec(None, (40.0, "L/min")),
    }
    assert spec.design == {"supply.flow": (30.0, "L/min")}
    assert spec.figures == {"split": "branch_a.flow / supply.flow"}
    assert spec.readings == "readings.csv"
    assert spec.settings == Settings(level=0.01, max_faults=3)
    where = spec.where(("meters", "FT-2", "sigma"))
    assert (where.file, where.line, where.column, where.tag) == ("case.yaml", 14, 52, "FT-2")


def test_a_case_survives_pickling(read):
    spec = read(LOOP, head=False)
    copy = pickle.loads(pickle.dumps(spec))
    assert copy.meters == spec.meters
    assert copy.where(("title",)) == spec.where(("title",))


def test_a_case_without_meters_can_be_planned_with(read):
    assert read("").meters == {}
    assert read("").settings == Settings()


def test_the_settings_model_and_the_settings_agree(read):
    assert read("settings: {}\n").settings == Settings()


def test_without_models_the_parts_of_domains_are_taken_as_they_stand(read):
    text = LOOP.replace("water: {unit: L/min}", "other: {a: 1}").replace(
        "{path: header -> collector}", "{path: header -> collector, b: 2}"
    )
    spec = read(text, head=False, option_models=None)
    assert spec.domains == {"other": {"a": 1}}
    assert spec.streams["branch_b"].options == {"b": 2}


def test_all_mistakes_of_a_file_are_told_at_once_in_its_order(refuse):
    text = (
        LOOP.replace("title:", "titel:")
        .replace("collector: {stores", "colector: {stores")
        .replace("1 % of reading, desc", "1 %, desc")
        .replace("unit: m3/h,", "unit: m3/hr.,")
        .replace("[FT-1, FT-4]", "[FT-1, FT-44]")
        .replace("level:", "levle:")
    )
    messages = refuse(text, head=False)
    assert [m.split(": ")[0] for m in messages] == [
        "case.yaml:2:1",
        "case.yaml:6:3",
        "case.yaml:13:52",
        "case.yaml:14:38",
        "case.yaml:21:59",
        "case.yaml:31:12",
    ]
    for message, cure in zip(messages, ["title", "collector", "of span", "m3/h", "FT-4", "level"], strict=True):
        assert cure in message.rsplit(";", 1)[-1] or cure in message.rsplit("?", 2)[-2]


@pytest.mark.parametrize(
    ("text", "place", "code", "cure"),
    [
        ("title: x\ndomains: {bare: }\nstreams: {a: outside -> n}\n", "1:1", "version-missing", "reconcile: 1"),
        ("reconcile: 2\ndomains: {bare: }\nstreams: {a: outside -> n}\n", "1:12", "version-unknown", "reconcile: 1"),
        ("reconcile: true\ndomains: {bare: }\nstreams: {a: outside -> n}\n", "1:12", "version-unknown", "reconcile: 1"),
        ("- a\n", "1:1", "not-a-case", "reconcile: 1"),
        ("just words\n", "1:1", "not-a-case", "reconcile: 1"),
        ("reconcile: 1\ndomains: {bare: }\n", "1:1", "missing-key", "add streams:"),
        ("reconcile: 1\nstreams: {a: outside -> n}\n", "1:1", "missing-key", "add domains:"),
        ("reconcile: 1\ndomains: {bare: }\nstreams: {}\n", "3:1", "no-streams", "a -> b"),
        ("reconcile: 1\ndomains: {}\nstreams: {a: outside -> n}\n", "2:10", "too-short", "at least 1"),
        ("reconcile: 1\ndomains: [bare]\nstreams: {a: outside -> n}\n", "2:10", "wrong-type", "key: value"),
        (
            "reconcile: 1\ndomains: {watre: {unit: L}}\nstreams: {a: outside -> n}\n",
            "2:11",
            "unknown-domain",
            "'water'",
        ),
        ("reconcile: 1\ndomains: {zzz: }\nstreams: {a: outside -> n}\n", "2:11", "unknown-domain", "--plugin"),
        ("reconcile: 1\ndomains: {bare: {a: 1}}\nstreams: {a: outside -> n}\n", "2:17", "no-options", "bare: {}"),
        ("reconcile: 1\ndomains: {water: }\nstreams: {a: outside -> n}\n", "2:11", "missing-key", "add unit:"),
    ],
)
def test_the_frame_of_a_case(refuse, text, place, code, cure):
    messages = refuse(text, head=False)
    assert len(messages) == 1
    assert messages[0].startswith(f"case.yaml:{place}: ")
    assert messages[0].endswith(f"[{code}]")
    assert cure in messages[0]


def test_an_unknown_domain_lists_the_installed_ones(refuse):
    (message,) = refuse("reconcile: 1\ndomains: {zzz: }\nstreams: {a: outside -> n}\n", head=False)
    assert "installed: water, blend, bare" in message


@pytest.mark.parametrize(
    ("line", "code", "cure"),
    [
        ("s: header ->", "stream-one-end", "e.g. header -> outside"),
        ("s: -> header", "stream-one-end", "e.g. outside -> header"),
        ("s: ->", "stream-one-end", "outside"),
        ("s: header", "stream-no-arrow", "from -> to"),
        ("s: header to tank", "stream-no-arrow", "write header -> tank"),
        ("s: header => tank", "stream-no-arrow", "write header -> tank"),
        ("s: header → tank", "stream-no-arrow", "write header -> tank"),
        ("s: tank <- header", "stream-no-arrow", "write header -> tank"),
        ("s: header -> a -> b", "stream-many-ends", "one stream for each arrow"),
        ("s: header -> header", "stream-self-loop", "correct one of its ends"),
        ("s: outside -> outside", "stream-outside-twice", "name the node"),
        ("s: Outside -> header", "outside-spelling", "did you mean 'outside'?"),
        ("s: cold water -> header", "bad-name", "cold_water"),
        ("cold water: outside -> header", "bad-name", "cold_water"),
        ("a.b: outside -> header", "bad-name", "a_b"),
        ("s:", "stream-no-path", "from -> to"),
        ("s: {}", "stream-no-path", "from -> to"),
        ("s: {paht: outside -> header}", "stream-no-path", "did you mean 'path' by 'paht'?"),
        ("s: {path: 3}", "stream-no-arrow", "from -> to"),
        ("s: [outside, header]", "stream-no-path", "from -> to"),
        ("s: {path: outside -> header, desnity: 2}", "unknown-key", "did you mean 'density'?"),
        ("s: {path: outside -> header, colour: 2}", "unknown-key", "path, density, grade"),
        ("s: {path: outside -> header, density: heavy}", "wrong-type", "write a number"),
        ("s: {path: outside -> header, density: -1}", "out-of-range", "above 0"),
        ("s: {path: outside -> header, grade: {NO: x}}", "wrong-type", "write a number"),
        ("s: outside -> haeder", "node-spelling", "did you mean 'header'?"),
        ("s: outside -> Header", "node-spelling", "did you mean 'header'?"),
        ("supply: outside -> header", "duplicate-key", "rename or remove"),
    ],
)
def test_streams(refuse, line, code, cure):
    head = "reconcile: 1\ndomains: {water: {unit: L}, blend: }\nstreams:\n"
    head += "  supply: outside -> header\n  r: header -> outside\n"
    messages = refuse(f"{head}  {line}\n", head=False)
    assert len(messages) == 1, messages
    assert messages[0].startswith("case.yaml:6:")
    assert messages[0].endswith(f"[{code}]")
    assert cure in messages[0]


def test_a_key_of_a_domain_that_the_case_does_not_use(refuse):
    (message,) = refuse("  s: {path: outside -> header, density: 1}\n")
    assert message.startswith("case.yaml:7:32: unknown key 'density'")
    assert "belongs to domain 'blend'" in message


def test_stream_values_are_those_of_the_model(read):
    head = "reconcile: 1\ndomains: {blend: {species: [NO, N, Y]}}\nstreams:\n"
    spec = read(head + "  s: {path: outside -> n, density: 2, grade: {NO: 1, N: 2, Y: 3e-1}}\n", head=False)
    assert spec.streams["s"].options == {"density": 2.0, "grade": {"NO": 1.0, "N": 2.0, "Y": 0.3}}
    assert spec.domains["blend"]["species"] == ["NO", "N", "Y"]


@pytest.mark.parametrize(
    ("line", "code", "cure"),
    [
        ("headr: {}", "node-unused", "did you mean 'header'?"),
        ("zzz: {}", "node-unused", "leave the node out"),
        ("outside: {}", "outside-is-no-node", "leave it out"),
        ("header: {store: true}", "unknown-key", "did you mean 'stores'?"),
        ("header: {stores: maybe}", "wrong-type", "true or false"),
        ("header: 3", "wrong-type", "header: {key: value}"),
    ],
)
def test_nodes(refuse, line, code, cure):
    messages = refuse(f"nodes:\n  {line}\n")
    assert len(messages) == 1, messages
    assert messages[0].startswith("case.yaml:8:")
    assert messages[0].endswith(f"[{code}]")
    assert cure in messages[0]


def test_numbered_nodes_are_no_misspelt_ones(read):
    spec = read("  s: outside -> tank_1\n  t: outside -> tank_2\n")
    assert {"tank_1", "tank_2"} <= set(spec.nodes)


def test_a_node_that_is_meant_may_be_nearly_another(read):
    assert "haeder" in read("  s: outside -> haeder\nnodes:\n  haeder: {}\n").nodes


@pytest.mark.parametrize(
    ("body", "place", "code", "cure"),
    [
        ("FT-1: {unit: L/min, sigma: 1 L/min}", "8:3", "missing-key", "supply.flow"),
        ("FT-1: {raeds: a.flow, unit: L/min, sigma: 1 L/min}", "8:10", "unknown-key", "did you mean 'reads'?"),
        ("FT-1: {reads: supply.flow, sigma: 1 L/min}", "8:3", "unit-missing", "unit: kg/h"),
        ("FT-1: {reads: supply.flow, unit: , sigma: 1 L/min}", "8:", "unit-missing", "unit: kg/h"),
        ("FT-1: {reads: supply.flow, unit: kg/hr., sigma: 1 L/min}", "8:36", "unit-unknown", "did you mean kg/h?"),
        ("FT-1: {reads: supply, unit: L/min, sigma: 1 L/min}", "8:17", "reads-no-quantity", "supply.flow"),
        ("FT-1: supply.flow", "8:9", "wrong-type", "FT-1: {reads: supply.flow"),
        ("FT-1: 3", "8:9", "wrong-type", "key: value"),
        ("FT-1:", "8:8", "wrong-type", "key: value"),
        ("' ': {reads: supply.flow, unit: L/min, sigma: 1 L/min}", "8:3", "bad-name", "header of the readings"),
        ("FT-1: {reads: supply.flow, unit: L/min, sigma: 1 L/min, fault_rate: 2}", "8:71", "out-of-range", "below 1"),
        ("FT-1: {reads: supply.flow, unit: L/min, sigma: 1 L/min, colour: red}", "8:59", "unknown-key", "known keys: "),
    ],
)
def test_meters(refuse, body, place, code, cure):
    messages = refuse(f"meters:\n  {body}\n")
    wanted = [m for m in messages if m.endswith(f"[{code}]")]
    assert len(wanted) == 1, messages
    assert wanted[0].startswith(f"case.yaml:{place}")
    assert cure in wanted[0]


@pytest.mark.parametrize(
    ("text", "code", "cure"),
    [
        ("known: {a.r: {vlaue: 3 L}}", "unknown-key", "did you mean 'value'?"),
        ("known: {a.r: }", "value-missing", "3.2 L/min"),
        ("known: {a.r: 3 foo}", "unit-unknown", "kg/h"),
        ("known: {a.r: 'about 3 L'}", "number-unreadable", "a number and its unit"),
        ("known: {a.r: {value: 3 L, sigma: 0 L}}", "sigma-zero", "known:"),
        ("known: {a.r: {value: 3 L, sigma: 1 % of span}}", "span-missing", "1 % of value"),
        ("known: {a.r: {value: 3 L, coverage: 2}}", "sigma-missing", "1 % of reading"),
        ("bounds: {a.r: lots}", "bound-unreadable", "at least 0 L/min"),
        ("bounds: {a.r: 3}", "bound-unreadable", "at least 0 L/min"),
        ("bounds: {a.r: 5 to 3 L}", "range-reversed", "lower end first"),
        ("bounds: {a.r: 5 L to 3 kg}", "unit-mismatch", "measures the same"),
        ("bounds: {a.r: at least 5 L and at most 3 L}", "bounds-conflict", "smaller number"),
        ("bounds: {a.r: at least 5 L and at least 3 L}", "bound-unreadable", "at most"),
        ("bounds: {a.r: at least 5 L/hr.}", "unit-unknown", "L/h"),
        ("design: {a.r: }", "value-missing", "30 L/min"),
        ("design: {a.r: high}", "number-unreadable", "a number and its unit"),
        ("figures: {f: }", "figure-missing", "branch_a.flow / supply.flow"),
        ("figures: {f: [a]}", "figure-missing", "branch_a.flow / supply.flow"),
        ("readings: 3", "wrong-type", "readings.csv"),
        ("settings: {levle: 0.1}", "unknown-key", "did you mean 'level'?"),
        ("settings: {level: 5}", "out-of-range", "below 1"),
        ("settings: {level: 0}", "out-of-range", "above 0"),
        ("settings: {level: 5 %}", "wrong-type", "write a number"),
        ("settings: {max_faults: -1}", "out-of-range", "at least 0"),
        ("settings: {max_faults: 1.5}", "wrong-type", "whole number"),
        ("settings: {percent_at: adjustd}", "unknown-choice", "did you mean 'adjusted'?"),
        ("settings: 3", "wrong-type", "key: value"),
        ("titel: x", "unknown-key", "did you mean 'title'?"),
    ],
)
def test_the_other_blocks(refuse, text, code, cure):
    messages = refuse(text + "\n")
    assert len(messages) == 1, messages
    assert messages[0].startswith("case.yaml:7:")
    assert messages[0].endswith(f"[{code}]")
    assert cure in messages[0]


def test_a_percentage_of_a_known_value(read):
    sigma = read("known: {a.r: {value: 3 L, sigma: 2 % of value}}\n").known["a.r"].sigma
    assert sigma.at(3.0) == pytest.approx(0.06)


def test_names_in_backticks_lose_them(read):
    spec = read("known: {'`a b.r`': 3 L}\nbounds: {'`a b.r`': at least 0 L}\n")
    assert list(spec.known) == list(spec.bounds) == ["a b.r"]


def test_a_file_of_twenty_thousand_lines(tmp_path, models):
    n = 7000
    lines = ["reconcile: 1", "domains: {water: {unit: L/min}}", "streams:"]
    ends = ["outside", *(f"n{i}" for i in range(n - 1)), "outside"]
    lines += [f"  s{i}: {ends[i]} -> {ends[i + 1]}" for i in range(n)]
    lines += ["meters:"]
    for i in range(n):
        lines += [f"  FT-{i}:", f"    {{reads: s{i}.flow, unit: L/min, sigma: 1 % of reading}}"]
    lines[-1] = lines[-1].replace("%", "% %")
    (tmp_path / "big.yaml").write_text("\n".join(lines) + "\n")
    with pytest.raises(InputError) as caught:
        read_case(tmp_path / "big.yaml", option_models=models)
    assert len(caught.value.problems) == 1
    assert caught.value.problems[0].where.line == len(lines) > 21_000


@given(
    st.permutations(
        [
            "title: x",
            "figures: {f: a.b / c.d}",
            "bounds: {a.b: at least 0 L}",
            "design: {a.b: 1 L}",
            "known: {a.b: 1 L}",
        ]
    )
)
def test_the_order_of_the_blocks_does_not_matter(tmp_path_factory, blocks):
    file = tmp_path_factory.mktemp("order") / "case.yaml"
    file.write_text("\n".join([*blocks, "streams: {s: outside -> n}", "domains: {x: }", "reconcile: 1"]))
    spec = read_case(file)
    assert (spec.title, spec.figures, spec.design) == ("x", {"f": "a.b / c.d"}, {"a.b": (1.0, "L")})
    assert spec.bounds["a.b"].lower == (0.0, "L")
