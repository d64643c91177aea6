"""Streams and meters from table files."""

import sys

import pytest
import xlsxwriter

from reconcile.errors import MissingExtra

HEAD = "reconcile: 1\ndomains: {blend: }\nstreams: streams.csv\nmeters: meters.csv\n"
STREAMS = "name,source,target,density\nsupply,outside,header,1.5\nreturn,header,outside,\n"
METERS = (
    "tag,reads,unit,sigma,span,description\n"
    'FT-1,supply.flow,L/min,1 % of reading; 0.1 L/min,,"two\nlines"\n'
    "010,return.flow,L/min,2 % of span,0 to 40 L/min,\n"
)


@pytest.fixture
def tables(tmp_path):
    def _tables(streams=STREAMS, meters=METERS):
        (tmp_path / "streams.csv").write_text(streams, encoding="utf-8")
        (tmp_path / "meters.csv").write_text(meters, encoding="utf-8")

    return _tables


def test_a_table_says_what_the_block_would_say(tables, read):
    tables()
    spec = read(HEAD, head=False)
    assert spec.streams["supply"].options == {"density": 1.5}
    assert spec.streams["return"].options == {}
    assert (spec.streams["supply"].source, spec.streams["supply"].target) == ("outside", "header")
    assert spec.meters["FT-1"].sigma.absolute == 0.1
    assert spec.meters["FT-1"].sigma.relative == 0.01
    assert spec.meters["FT-1"].options == {"description": "two\nlines"}
    assert spec.meters["010"].span == (0.0, 40.0)


@pytest.mark.parametrize("delimiter", [";", "\t"])
def test_other_delimiters_and_paths(tables, read, delimiter):
    tables(f"stream{delimiter}path\r\nsupply{delimiter}outside -> header\r\n", METERS.replace("return", "supply"))
    assert read(HEAD, head=False).streams["supply"].target == "header"


def test_a_spreadsheet(tmp_path, tables, read):
    tables()
    book = xlsxwriter.Workbook(tmp_path / "meters.xlsx")
    sheet = book.add_worksheet()
    for i, row in enumerate(
        [
            ["tag", "reads", "unit", "sigma"],
            [101, "supply.flow", "L/min", "1 L/min"],
            [],
            ["b", "return.flow", "L/min", "1 L/min"],
        ]
    ):
        sheet.write_row(i, 0, row)
    book.close()
    spec = read(HEAD.replace("meters.csv", "meters.xlsx"), head=False)
    assert list(spec.meters) == ["101", "b"]


def test_mistakes_in_a_spreadsheet_name_the_row(tmp_path, tables, refuse):
    tables()
    book = xlsxwriter.Workbook(tmp_path / "meters.xlsx")
    sheet = book.add_worksheet()
    for i, row in enumerate([["tag", "reads", "unit", "sigma"], ["a", "supply.flow", "L/min", "1 %"]]):
        sheet.write_row(i, 0, row)
    book.close()
    (message,) = refuse(HEAD.replace("meters.csv", "meters.xlsx"), head=False)
    assert message.startswith("meters.xlsx row 1: sigma of meter 'a' is '1 %': of reading or of span?")


def test_a_missing_library_names_the_extra(tmp_path, tables, read, monkeypatch):
    tables()
    (tmp_path / "meters.xlsx").write_bytes(b"x")
    monkeypatch.setitem(sys.modules, "python_calamine", None)
    with pytest.raises(MissingExtra, match=r"reading meters.xlsx needs python-calamine.*\[excel\]"):
        read(HEAD.replace("meters.csv", "meters.xlsx"), head=False)


def test_a_broken_spreadsheet(tmp_path, tables, refuse):
    tables()
    (tmp_path / "meters.xlsx").write_bytes(b"no spreadsheet")
    (message,) = refuse(HEAD.replace("meters.csv", "meters.xlsx"), head=False)
    assert message.startswith("meters.xlsx: table 'meters.xlsx' is no spreadsheet")


@pytest.mark.parametrize(
    ("old", "new", "place", "code", "cure"),
    [
        ("2 % of span", "2 %", "meters.csv:4:4 row 2", "percent-of-what", "2 % of reading"),
        ("1 % of reading; 0.1 L/min", "", "meters.csv:2:1 row 1", "sigma-missing", "1 % of reading"),
        ("return.flow,L/min", "return.flow,kg/hr.", "meters.csv:4:3 row 2", "unit-unknown", "kg/h"),
        ("010,", "FT-1,", "meters.csv:4:1 row 2", "duplicate-key", "rename"),
        ("010,", ",", "meters.csv:4:1 row 2", "name-missing", "fill the cell"),
        ("sigma,span,", "sigma,span,sgima,", "meters.csv:1:6", "unknown-key", "did you mean 'sigma'?"),
        ("sigma,span,", "sigma,sigma,", "meters.csv:1:5", "duplicate-key", "rename"),
        ("0 to 40 L/min,", "0 to 40 L/min,,more", "meters.csv:4:1 row 2", "row-too-long", "in quotes"),
        ("tag,", "meter,", "meters.csv:1:1", "unknown-key", "tag"),
        ("span,description", "span,", "meters.csv:1:6", "column-unnamed", "name it"),
    ],
)
def test_mistakes_are_located_by_file_row_and_column(tables, refuse, old, new, place, code, cure):
    assert old in METERS
    tables(meters=METERS.replace(old, new, 1))
    messages = refuse(HEAD, head=False)
    wanted = [m for m in messages if m.endswith(f"[{code}]")]
    assert len(wanted) == 1, messages
    assert wanted[0].startswith(f"{place}: ")
    assert cure in wanted[0]


def test_mistakes_of_streams(tables, refuse):
    tables(STREAMS.replace("header,1.5", "outside,-1"))
    messages = refuse(HEAD, head=False)
    assert messages[0].startswith("streams.csv:2:2 row 1: stream 'supply' goes from outside to outside")
    assert messages[1].startswith("streams.csv:2:4 row 1: density of stream 'supply' (domain blend) is '-1'")


@pytest.mark.parametrize(("text", "says"), [("", "is empty"), ("reads,unit\na.b,L\n", "has no column 'tag'")])
def test_tables_without_what_is_needed(tables, refuse, text, says):
    tables(meters=text)
    (message,) = refuse(HEAD, head=False)
    assert message.startswith("meters.csv")
    assert says in message


def test_a_table_that_is_not_there(refuse, tables):
    tables()
    (message,) = refuse(HEAD.replace("meters.csv", "metres.csv"), head=False)
    assert message.startswith("case.yaml:4:9: meters: there is no file 'metres.csv' beside the case")


def test_a_table_that_is_not_utf8(refuse, tables, tmp_path):
    tables()
    (tmp_path / "meters.csv").write_bytes(b"tag,reads\nK\xfchler,a.b\n")
    (message,) = refuse(HEAD, head=False)
    assert "meters.csv" in message
    assert "UTF-8" in message
