"""YAML by the rules of version 1.2, with places."""

import pytest
import yaml
from hypothesis import given
from hypothesis import strategies as st

from reconcile.case import yaml_source
from reconcile.case.yaml_source import read_yaml
from reconcile.errors import InputError


@pytest.fixture
def load(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)

    def _load(text):
        (tmp_path / "c.yaml").write_bytes(text if isinstance(text, bytes) else text.encode())
        return read_yaml("c.yaml")

    return _load


@pytest.fixture
def complaint(load):
    def _complaint(text):
        with pytest.raises(InputError) as caught:
            load(text)
        return str(caught.value)

    return _complaint


@pytest.fixture(params=["C parser", "Python parser"])
def either_parser(request, monkeypatch):
    """libyaml need not be there: both parsers must say the same."""
    if request.param == "Python parser":
        pure = type(
            "_Pure", (yaml.SafeLoader,), {"yaml_implicit_resolvers": yaml_source._CoreLoader.yaml_implicit_resolvers}
        )
        monkeypatch.setattr(yaml_source, "_CoreLoader", pure)


def test_species_and_times_keep_their_spelling(load, either_parser):
    data, _ = load("species: [NO, N, Y, on, off, yes]\nNO: 1\nN: 2\nY: 3\ntime: 12:30\ndate: 2025-03-04\n")
    assert data["species"] == ["NO", "N", "Y", "on", "off", "yes"]
    assert (data["NO"], data["N"], data["Y"]) == (1, 2, 3)
    assert data["time"] == "12:30"
    assert data["date"] == "2025-03-04"


# YAML 1.2.2 specification, section 10.3.2 (core schema).
@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("010", 10),
        ("0o17", 15),
        ("0x1F", 31),
        ("-3", -3),
        ("1e-3", 0.001),
        ("1.", 1.0),
        (".5", 0.5),
        ("+1.5E+2", 150.0),
        (".inf", float("inf")),
        ("-.INF", float("-inf")),
        ("true", True),
        ("FALSE", False),
        ("null", None),
        ("~", None),
        ("", None),
        ("1_000", "1_000"),
        ("0b11", "0b11"),
        ("1e", "1e"),
        ("tRue", "tRue"),
        ("'1'", "1"),
        ("!!str 1", "1"),
    ],
)
def test_scalars_are_read_by_the_core_schema(load, either_parser, text, value):
    found = load(f"a: {text}\n")[0]["a"]
    assert found == value
    assert type(found) is type(value)


def test_keys_are_names_as_they_are_spelt(load):
    data, places = load("010: {x: 1}\ntrue: 2\n1.50: 3\n")
    assert list(data) == ["010", "true", "1.50"]
    assert (places.where(("010", "x")).line, places.where(("010", "x")).column) == (1, 10)


def test_places_of_keys_values_and_what_is_missing(load, either_parser):
    _, places = load("a:\n  ä: [1, x]\n  c:\n    d: e\n")
    assert str(places.where(("a", "ä", 1))) == "c.yaml:2:10"
    assert str(places.where(("a", "c", "d"), key=True)) == "c.yaml:4:5"
    assert str(places.where(("a", "c", "missing"))) == "c.yaml:3:3"
    assert str(places.where(("nothing",))) == "c.yaml:1:1"


def test_anchors_are_followed_and_both_uses_have_a_place(load):
    data, places = load("a: &x {u: 1}\nb: *x\n")
    assert data["b"] == {"u": 1}
    assert places.where(("b", "u")).line == 1


def test_a_byte_order_mark_is_no_part_of_the_first_key(load):
    assert load(b"\xef\xbb\xbfa: 1\n")[0] == {"a": 1}


def test_duplicate_keys_name_both_places(complaint, either_parser):
    text = complaint("m:\n  FT-1: 1\n  FT-2: 2\n  FT-1: 3\n")
    assert text.startswith("c.yaml:4:3: 'FT-1' stands here and in line 2, column 3")
    assert "rename or remove" in text


@pytest.mark.parametrize(
    ("text", "place", "cure"),
    [
        ("a:\n\tb: 1\n", "2:1", "indent with spaces"),
        ("a: 'x\nb: 2\n", "1:4", "close it on the same line"),
        ('a: 1\nb: "x\n', "2:4", "close it on the same line"),
        ("a: [1, 2\nb: 3\n", "1:4", "close it"),
        ("a: {x: 1\n", "1:4", "close it"),
        ("a: b: c\n", "1:5", "in quotes"),
        ("a: `odd name`.flow\n", "1:4", "put the whole value in quotes"),
        ("a: % of\n", "1:4", "put the whole value in quotes"),
        ("a: *x\n", "1:4", "define it"),
        ("a: 1\n---\nb: 2\n", "2:1", "one case in one file"),
        ("a: &x [*x]\n", "1:", "write out what was meant"),
        ("a: !!python/object:os.x 1\n", "1:4", "leave it out"),
        ("a: !!int abc\n", "1:4", "leave the tag out"),
        ("a: \x01\n", "1:4", "remove it"),
        ("a: 1\n? [b]\n: 1\n", "2:3", "write a name"),
        ("a: &b {c: 1}\ne: {<<: *b}\n", "2:5", "repeat the keys"),
        ("a:\n  b: 1\n c: 2\n", "3:2", "check the indentation"),
        ("", "1:1", "reconcile: 1"),
        ("# nothing\n", "1:1", "reconcile: 1"),
    ],
)
def test_what_is_no_yaml_is_located_and_cured(complaint, either_parser, text, place, cure):
    message = complaint(text)
    assert message.startswith(f"c.yaml:{place}")
    assert cure in message


@pytest.mark.skipif(not yaml.__with_libyaml__, reason="the Python parser takes y: before a brace")
def test_a_colon_before_a_brace(complaint):
    assert "put a space behind the colon" in complaint("a: {x: 1, y:}\n")


def test_nesting_without_end_is_refused(complaint, either_parser):
    assert "nested too deeply" in complaint("a: " + "[" * 3000)
    assert "nested too deeply" in complaint("a: " + "[" * 100 + "]" * 100)


def test_aliases_cannot_unfold_without_end(complaint, monkeypatch):
    monkeypatch.setattr(yaml_source, "MOST_VALUES", 1000)
    bomb = "a0: &a0 [x, x, x, x]\n" + "".join(f"a{i}: &a{i} [*a{i - 1}, *a{i - 1}, *a{i - 1}]\n" for i in range(1, 12))
    assert "millions of values" in complaint(bomb)


def test_bytes_that_are_no_utf8_are_located(complaint):
    message = complaint(b"a: 1\ntitle: K\xfchler\n")
    assert message.startswith("c.yaml:2:9: byte 0xfc is not UTF-8")
    assert "save the file with encoding UTF-8" in message


def test_missing_file_and_folder(tmp_path):
    with pytest.raises(InputError, match="there is no such file"):
        read_yaml(tmp_path / "none.yaml")
    with pytest.raises(InputError, match="this is a folder"):
        read_yaml(tmp_path)


NAMES = st.text("abcNOYn01_-", min_size=1, max_size=5).filter(lambda s: s[0] not in "-")


@given(
    st.recursive(
        st.one_of(NAMES, st.integers(), st.booleans(), st.none(), st.floats(allow_nan=False)),
        lambda inner: st.one_of(st.lists(inner, max_size=3), st.dictionaries(NAMES, inner, max_size=3)),
        max_leaves=10,
    )
)
def test_written_data_is_read_back(tmp_path_factory, value):
    file = tmp_path_factory.mktemp("yaml") / "c.yaml"
    data = {"top": value}

    def write(x):
        if isinstance(x, dict):
            return "{" + ", ".join(f'"{k}": {write(v)}' for k, v in x.items()) + "}"
        if isinstance(x, list):
            return "[" + ", ".join(write(v) for v in x) + "]"
        if isinstance(x, str):
            return f'"{x}"'
        if isinstance(x, float):
            return {"inf": ".inf", "-inf": "-.inf"}.get(repr(x), repr(x))
        return {True: "true", False: "false", None: "null"}[x] if x in (None,) or isinstance(x, bool) else str(x)

    file.write_text(write(data))
    assert read_yaml(file)[0] == data
