"""The CSV reader: what it understands, and what it says about what it does not."""

import hashlib
import subprocess
import sys

import numpy as np
import pytest

from reconcile.errors import InputError
from reconcile.readings import ReadingsTable, Status, csv_source, read_csv


@pytest.fixture
def write(tmp_path):
    def inner(text, encoding="utf-8", name="readings.csv"):
        path = tmp_path / name
        path.write_bytes(text if isinstance(text, bytes) else text.encode(encoding))
        return path

    return inner


def refusal(path, **options):
    with pytest.raises(InputError) as caught:
        read_csv(path, **options)
    return caught.value


def codes(table: ReadingsTable) -> list[str]:
    return [n.code for n in table.notices]


# ------------------------------------------------------------------ what is understood


def test_plain_file(write):
    path = write("time,FT-1,FT-2\n2025-01-01 00:00,1.5,2\n2025-01-01 00:10,-1e-3,+3\n")
    table = read_csv(path, expected=["FT-2", "FT-1"])
    assert table.columns == ("FT-2", "FT-1")
    np.testing.assert_array_equal(table.values, [[2.0, 1.5], [3.0, -0.001]])
    assert str(table.time[1]) == "2025-01-01 00:10:00"
    assert table.source_hash == hashlib.sha256(path.read_bytes()).hexdigest()
    assert not table.values.flags.writeable
    assert table.notices == ()
    assert 7 <= len(table.echo) <= 12
    assert any("FT-2 = 2, FT-1 = 1.5" in line for line in table.echo)


def test_numbers_are_those_of_float(write):
    rng = np.random.default_rng(7)
    numbers = rng.normal(size=200) * 10.0 ** rng.integers(-300, 300, 200)
    table = read_csv(write("A\n" + "\n".join(repr(v) for v in numbers.tolist()) + "\n"))
    np.testing.assert_array_equal(table.values[:, 0], numbers)


@pytest.mark.parametrize("delimiter", [",", ";", "\t", "|"])
@pytest.mark.parametrize("encoding", ["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "cp1252"])
def test_delimiters_and_encodings(write, delimiter, encoding):
    rows = [["Zähler", "FT-1", "FT-2"], ["ä", "1.5", "2.25"], ["ö", "3.5", "40"]]
    text = "\r\n".join(delimiter.join(r) for r in rows) + "\r\n"
    table = read_csv(write(text, encoding), label_column="Zähler")
    np.testing.assert_array_equal(table.values, [[1.5, 2.25], [3.5, 40]])
    assert list(table.labels) == ["ä", "ö"]
    if encoding == "cp1252":
        assert "encoding-guessed" in codes(table)


@pytest.mark.parametrize("delimiter", [";", "\t", "|"])
def test_decimal_comma_is_found(write, delimiter):
    text = "\n".join(delimiter.join(r) for r in [["n", "P", "Q"], ["1", "40,8", "1,5e3"], ["2", "41,25", "-7"]])
    table = read_csv(write(text), label_column="n")
    np.testing.assert_array_equal(table.values, [[40.8, 1500.0], [41.25, -7.0]])
    assert any("decimal mark ','" in line for line in table.echo)


def test_decimal_comma_in_quotation_marks(write):
    table = read_csv(write('P,Q\n"40,8","1,25"\n"41,0",3\n'))
    np.testing.assert_array_equal(table.values, [[40.8, 1.25], [41.0, 3.0]])


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("P;Q\n1.250,5;3\n", [[1250.5, 3]]),
        ('P,Q\n"1,250.5",3\n"2,000",3.5\n', [[1250.5, 3], [2000, 3.5]]),
        ("P;Q\n1 250,5;3\n", [[1250.5, 3]]),
        ("P;Q\n1\u202f250,5;3\n", [[1250.5, 3]]),
        ("P;Q\n1'250.5;3\n", [[1250.5, 3]]),
        ("P;Q\n\u22123,5;3\n", [[-3.5, 3]]),
    ],
)
def test_thousands_marks_that_leave_no_doubt(write, text, expected):
    np.testing.assert_array_equal(read_csv(write(text)).values, expected)


def test_declared_thousands(write):
    path = write('P,Q\n"1,250",2\n"3,125",4\n')
    np.testing.assert_array_equal(read_csv(path, thousands=",").values, [[1250, 2], [3125, 4]])
    np.testing.assert_array_equal(read_csv(path, decimal=",").values, [[1.25, 2], [3.125, 4]])
    path = write("P;Q\n1.250;2\n3.125;4\n")
    np.testing.assert_array_equal(read_csv(path, thousands=".").values, [[1250, 2], [3125, 4]])


def test_three_digits_everywhere_is_read_with_a_notice(write):
    table = read_csv(write("P,Q\n1.250,2.125\n3.125,4\n"))
    np.testing.assert_array_equal(table.values, [[1.25, 2.125], [3.125, 4]])
    (notice,) = table.notices
    assert notice.code == "thousands-or-decimal"
    assert "'1.250' was read as 1.250, and could be 1250" in notice.message
    # A fourth digit before the mark, a leading zero or another number of digits settles it.
    for other in ("1234.500", "0.125", "7.5"):
        assert codes(read_csv(write(f"P,Q\n1.250,2.125\n{other},4\n"))) == []


def test_units_row_and_units_in_the_header(write):
    table = read_csv(write("time,FT-1,FT-2\n,kg/h,[m3/h]\n2025-01-01,1,2\n"))
    assert table.units == {"FT-1": "kg/h", "FT-2": "m3/h"}
    assert len(table) == 1
    assert "file-cleaned" in codes(table)
    assert "line 2 taken as units" in table.notices[0].message
    assert table.lines[0] == 3
    table = read_csv(write("time,FT-1 [kg/h],FT-2 (wt%)\n2025-01-01,1,2\n"), expected=["FT-1", "FT-2"])
    assert table.units == {"FT-1": "kg/h", "FT-2": "wt%"}


@pytest.mark.parametrize("row", ["1,1", "1,NA", "1,-", "<1,2", "-,-", "A,NA", "A,1"])
def test_a_row_of_readings_is_not_taken_for_units(write, row):
    assert len(read_csv(write(f"id,FT-1\n{row}\n3,4\n"))) == 2


def test_cleaning_is_told(write):
    table = read_csv(write("FT-1,FT-2\nkg/h,kg/h\n1.5\u00a0,\u00a02\n3.5,4\u00a0\n", "utf-8-sig"))
    np.testing.assert_array_equal(table.values, [[1.5, 2], [3.5, 4]])
    assert table.notices[0].message == (
        "removed a byte-order mark and 3 non-breaking spaces; line 2 taken as units; check the echo"
    )


def test_merged_header_and_titles(write):
    table = read_csv(write("Flows,,Lab,\nA,B,C,D\nkg/h,kg/h,%,%\n1,2,3,4\n"))
    assert table.columns == ("A", "B", "C", "D")
    assert table.units["C"] == "%"
    assert "title-rows" in codes(table)
    table = read_csv(write("Export of 3 May\nplant 7,,\nA,B,C\n1,2,3\n"), expected=["C", "A", "B"])
    np.testing.assert_array_equal(table.values, [[3, 1, 2]])


def test_blanks(write):
    table = read_csv(write("A,B\n1,\n2,NA\n3,NaN\n4,-\n5,\u2013\n6,n/a\n7,null\n8,--\n"), blanks=["--"])
    assert (table.status[:, 1] == Status.MISSING).all()
    assert np.isnan(table.values[:, 1]).all()
    assert any("8 blank" in line for line in table.echo)


def test_blank_lines_comments_and_trailing_delimiters(write):
    table = read_csv(write("# exported by hand\nA,B,\n1,2,\n\n3,4,\n"))
    np.testing.assert_array_equal(table.values, [[1, 2], [3, 4]])
    assert table.lines.tolist() == [3, 5]


def test_stamp_column_is_found_by_its_cells(write):
    table = read_csv(write("Zeitpunkt;FT-1\n03.04.2025 10:00;1,5\n03.04.2025 10:10;2,5\n"), expected=["FT-1"])
    assert str(table.time[0]) == "2025-04-03 10:00:00"


def test_day_and_clock_in_two_columns(write):
    table = read_csv(
        write("Date,Time,FT-1\n,,kg/h\n2025-04-03,10:00,1.5\n2025-04-03,10:10:30,2.5\n"), expected=["FT-1"]
    )
    assert str(table.time[1]) == "2025-04-03 10:10:30"
    assert table.units == {"FT-1": "kg/h"}


def test_lone_carriage_returns_end_lines(write):
    table = read_csv(write("A,B\r1,2\r3,4\r"))
    assert table.lines.tolist() == [2, 3]


def test_small_files_without_stamps_need_no_pandas(write):
    path = write("A,B\n1,2\n")
    code = (
        f"import sys; from reconcile.readings import read_csv; read_csv({str(path)!r}); print('pandas' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"


def test_remarks_and_kept_columns(write):
    table = read_csv(write('A,note,pump_run\n1,"a leak, small",1\n2,,0\n'), keep=["pump_run"])
    assert table.columns == ("A",)
    assert table.extra["note"].tolist() == ["a leak, small", ""]
    assert table.extra["pump_run"].tolist() == ["1", "0"]


# ------------------------------------------------------------------ limits


def test_a_limit_is_an_interval_and_never_a_number(write):
    table = read_csv(write("Cu,Zn,T\n<0.05,>10,1\n0.2,\u22647,2\n< 0.10,5,< -3\n"))
    assert np.isnan(table.values[[0, 0, 1, 2, 2], [0, 1, 1, 0, 2]]).all()
    assert table.status[0].tolist() == [Status.CENSORED_LOW, Status.CENSORED_HIGH, Status.GOOD]
    assert (table.lower[0, 0], table.upper[0, 0]) == (0.0, 0.05)
    assert (table.lower[0, 1], table.upper[0, 1]) == (10.0, np.inf)
    assert (table.lower[2, 2], table.upper[2, 2]) == (-np.inf, -3.0)
    assert np.isnan(table.lower[1, 0])
    assert table.reason(2, 0) == "below the limit 0.10"
    assert not table.usable[0, 0]


def test_a_limit_is_refused_on_demand(write):
    error = refusal(write("Cu\n0.1\n0.2\n<0.05\n"), censored="refuse")
    assert error.code == "censored-cell"
    assert ":4:1 row 3" in str(error)
    assert "'<0.05' is a limit, not a number; declare censored = interval" in str(error)


def test_a_limit_of_zero_cannot_be(write):
    error = refusal(write("Cu\n0.1\n<0\n"))
    assert error.code == "limit-zero"
    assert "a limit of detection of 0 cannot be" in str(error)


def test_a_limit_in_another_unit(write):
    error = refusal(write("Cu [mg/l]\n0.1\n<50 \u00b5g/l\n"))
    assert error.code == "limit-unit"
    assert "is a limit with its own unit, '\u00b5g/l'; write the limit in the unit of the column" in str(error)


def test_failed_formulas_are_missing_with_a_notice(write):
    table = read_csv(write("A,B\n1,2\n#DIV/0!,3\n"))
    assert table.status[1, 0] == Status.BAD_SOURCE
    (notice,) = table.notices
    assert notice.code == "spreadsheet-error"
    assert notice.where.line == 3
    assert "'#DIV/0!' treated as missing; the cell's formula failed in the spreadsheet" in notice.message
    many = read_csv(write("A\n1\n" + "#REF!\n" * 30))
    assert len(many.notices) == 6
    assert "30 cells" in many.notices[-1].message


# ------------------------------------------------------------------ refusals


def test_text_in_a_number_cell_has_its_true_line(write):
    error = refusal(write('A,P,note\n1,2,"one\ntwo\nthree"\n2,n/a (leak),x\n3,4,\n'))
    (problem,) = error.problems
    assert problem.code == "text-in-number"
    assert (problem.where.line, problem.where.column, problem.where.row) == (5, 2, 2)
    assert "column 'P': 'n/a (leak)' is not a number; accepted blanks: empty, NA" in str(error)
    assert "note" in problem.hint


def test_all_problems_at_once(write):
    error = refusal(write("A,B\n1,x\ny,2\n3\n4,5,6\n5,12 kg/h\n6,inf\n"))
    assert [p.code for p in error.problems] == [
        "text-in-number",
        "text-in-number",
        "row-length",
        "row-length",
        "unit-in-cell",
        "not-finite",
    ]
    assert [p.where.line for p in error.problems] == [2, 3, 4, 5, 6, 7]


def test_problems_of_a_kind_are_capped_with_a_count(write):
    error = refusal(write("A\n1\n" + "".join(f"x{i}\n" for i in range(57))))
    assert len(error.problems) == 21
    assert error.problems[-1].message == "and 37 more of this kind"


def test_columns_and_tags_that_do_not_meet(write):
    error = refusal(write("retentat,feed\n1,2\n"), expected=["feed", "retentate", "permeate"])
    assert {p.code for p in error.problems} == {"column-missing", "column-unknown"}
    assert "column 'retentat' matches no meter, and meter 'retentate' has no column" in str(error)
    assert "did you mean 'retentate'?" in str(error)
    assert "meter 'permeate' has no column" in str(error)


def test_a_missing_column_may_be_accepted(write):
    table = read_csv(write("feed,zzz\n1,2\n"), expected=["feed", "permeate"], missing_columns="notice")
    assert table.status.tolist() == [[Status.GOOD, Status.MISSING]]
    assert codes(table) == ["column-ignored", "column-missing"]


def test_duplicate_columns(write):
    error = refusal(write("P,Q,P\n1,2,1\n1,2,3\n"))
    assert "column 'P' appears twice (1 and 3) with different values in 1 rows; rename one" in str(error)
    error = refusal(write("P,Q,P\n1,2,1\n1,2,1\n"))
    assert "with the same values in every row; remove one of them" in str(error)


def test_one_column(write):
    error = refusal(write("A;B;C\n1,5;2;3\n"), delimiter=",")
    assert error.code == "one-column"
    assert "only 1 column read with delimiter ','; there are 2 semicolons in the header; delimiter = ';'?" in str(error)
    error = refusal(write("A B C\n1 2 3\n"), expected=["A", "B", "C"])
    assert "one-column" in {p.code for p in error.problems}
    np.testing.assert_array_equal(read_csv(write("A\n1\n2\n")).values, [[1], [2]])


def test_decimal_commas_parted_by_commas(write):
    error = refusal(write("A,B\n40,8,2,5\n1,5,3\n"))
    assert error.code == "row-length"
    assert "4 cells under a header of 2; decimal commas? Export with delimiter ';'" in str(error)


def test_decimal_marks_that_contradict(write):
    error = refusal(write("A;B\n40,8;2\n41,5;3\n40.8;4\n"))
    assert error.code == "decimal-mark"
    assert "'40.8' has the mark '.', but the decimal mark of this file is ','" in str(error)
    assert error.problems[0].where.line == 4


def test_thousands_or_decimal_is_refused(write):
    error = refusal(write('P,Q\n"1,250",2\n"3,125",4\n'))
    assert "'1,250' could be 1.250 or 1250" in str(error)
    assert "declare decimal = ',' or thousands = ','" in str(error)


def test_a_delimiter_that_cannot_be_told(write):
    error = refusal(write("a;b,c\nx;y,z\n"))
    assert error.code == "delimiter"
    assert "declare delimiter =" in str(error)


@pytest.mark.parametrize(
    ("raw", "code", "words"),
    [
        (b"", "file-empty", "empty"),
        (b"  \n\n", "file-empty", "empty"),
        (b"PK\x03\x04abc", "not-text", "a spreadsheet or zip archive"),
        (b"A,B\n1,\x00\x01\x00\n", "not-text", "zero bytes"),
        (b"A,B\n", "no-rows", "no row of readings"),
        (b'A,B\n1,"2\n3,4\n', "quote", "a quotation mark is opened here and never closed"),
        (b"A,B\n1,2\nA,B\n3,4\n", "header-again", "two files appended?"),
        (b"A,,B\n1,2,3\n", "column-unnamed", "column 2 has cells, but no name"),
        (b"A,B\nx,1\ny,2\n", "column-not-numeric", "list it under keep"),
    ],
)
def test_files_that_are_not_what_they_should_be(write, raw, code, words):
    error = refusal(write(raw))
    assert code in {p.code for p in error.problems}
    assert words in str(error)


def test_missing_file_names_its_neighbour(write, tmp_path):
    write("A\n1\n", name="readings.csv")
    error = refusal(tmp_path / "reading.csv")
    assert error.code == "file-missing"
    assert "did you mean 'readings.csv'?" in str(error)
    assert refusal(tmp_path).code == "file-missing"


def test_options_are_checked(write):
    path = write("A\n1\n")
    error = refusal(path, delimeter=";", decimal="comma", blanks="NA")
    assert [p.code for p in error.problems] == ["unknown-option", "option-value", "option-value"]
    assert "did you mean 'delimiter'?" in str(error)
    assert refusal(path, time_column="tyme").code == "column-missing"
    assert refusal(path, encoding="utf-9").code == "encoding"
    assert refusal(write(b"A\n\xe4\n"), encoding="utf-8").problems[0].where.line == 2


# ------------------------------------------------------------------ the quick way


@pytest.fixture
def large():
    rng = np.random.default_rng(20)
    values = rng.normal(50, 7, (300, 3)).round(4)
    lines = ["time,FT-1,FT-2,FT-3"]
    stamps = np.datetime64("2025-01-01T00:00:00") + np.arange(300) * np.timedelta64(60, "s")
    for stamp, row in zip(stamps, values.tolist(), strict=True):
        lines.append(",".join([str(stamp), *map(repr, row)]))
    return lines, values


def test_the_quick_way_agrees_with_the_exact_one(write, large, monkeypatch):
    lines, values = large
    lines[7] = lines[7].rsplit(",", 1)[0] + ","
    lines[9] = lines[9].rsplit(",", 1)[0] + ",NA"
    path = write("\n".join(lines) + "\n")
    exact = read_csv(path)
    taken = _watch(monkeypatch)
    quick = read_csv(path)
    assert taken == [True]
    np.testing.assert_array_equal(quick.values, exact.values)
    np.testing.assert_array_equal(quick.status, exact.status)
    np.testing.assert_array_equal(quick.lines, exact.lines)
    np.testing.assert_array_equal(quick.values[0], values[0])
    assert quick.time.equals(exact.time)
    assert quick.source_hash == exact.source_hash


@pytest.mark.parametrize(
    ("cell", "code"),
    [
        ("abc", "text-in-number"),
        ("inf", "not-finite"),
        ("1_0", "text-in-number"),
        (None, "row-length"),
        ("1,2", "row-length"),
    ],
)
def test_the_quick_way_gives_up_on_anything_odd(write, large, monkeypatch, cell, code):
    lines, _ = large
    head = lines[250].rsplit(",", 1)[0]
    lines[250] = head if cell is None else f"{head},{cell}"
    taken = _watch(monkeypatch)
    error = refusal(write("\n".join(lines) + "\n"))
    assert taken == [False]
    assert error.code == code
    assert error.problems[0].where.line == 251


def test_the_quick_way_leaves_limits_and_quotes_to_the_exact_one(write, large, monkeypatch):
    lines, _ = large
    lines[100] = lines[100].rsplit(",", 1)[0] + ",<0.05"
    taken = _watch(monkeypatch)
    table = read_csv(write("\n".join(lines) + "\n"))
    assert taken == [False]
    assert table.status[99, 2] == Status.CENSORED_LOW


def _watch(monkeypatch):
    """Send every file the quick way, and note whether it was taken."""
    from reconcile.readings import csv_fast

    real = csv_fast.read_fast
    taken = []

    def watched(*arguments):
        found = real(*arguments)
        taken.append(found is not None)
        return found

    monkeypatch.setattr(csv_fast, "read_fast", watched)
    monkeypatch.setattr(csv_source, "FAST_FROM_BYTES", 0)
    return taken


def test_without_the_quick_library_the_exact_way_is_taken(write, large, monkeypatch):
    lines, values = large
    monkeypatch.setitem(sys.modules, "pyarrow", None)
    taken = _watch(monkeypatch)
    np.testing.assert_array_equal(read_csv(write("\n".join(lines) + "\n")).values, values)
    assert taken == [False]
