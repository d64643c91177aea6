"""What must hold for any file: what is written is read, and no file makes the reader fall over."""

import numpy as np
from hypothesis import example, given
from hypothesis import strategies as st

from reconcile.errors import InputError
from reconcile.readings.csv_source import parse_csv
from reconcile.readings.options import ReadOptions

numbers = st.floats(allow_nan=False, allow_infinity=False)
tags = st.lists(st.from_regex(r"[A-Z]{2}-[0-9]{3}", fullmatch=True), min_size=2, max_size=5, unique=True)


@given(st.data(), tags, st.sampled_from([";", "\t", "|"]), st.sampled_from([".", ","]))
def test_what_is_written_is_read(data, header, delimiter, decimal):
    row = st.lists(st.one_of(numbers, st.none()), min_size=len(header), max_size=len(header))
    filled = row.filter(lambda r: any(v is not None for v in r))
    rows = data.draw(st.lists(filled, min_size=1, max_size=8))
    lines = [delimiter.join(header)]
    for values in rows:
        lines.append(delimiter.join("" if v is None else repr(v).replace(".", decimal) for v in values))
    options = ReadOptions(expected=header, decimal=decimal)
    table = parse_csv("\n".join(lines).encode(), "x.csv", options)
    expected = np.array([[np.nan if v is None else v for v in r] for r in rows])
    np.testing.assert_array_equal(table.values, expected)
    assert np.array_equal(table.status == 0, np.isfinite(expected))


def outcome(raw, options):
    """Return the table, or the problems with the file; anything else that is raised is a fault of the reader."""
    try:
        return parse_csv(raw, "x.csv", options), ()
    except InputError as error:
        return None, error.problems


def check(raw):
    for options in (ReadOptions(), ReadOptions(expected=("A", "B"))):
        table, problems = outcome(raw, options)
        assert bool(problems) != (table is not None and len(table) > 0)
        assert all(p.code and p.message for p in problems)


@given(st.binary(max_size=300))
@example(b"\xff\xfe")
@example(b"\xef\xbb\xbf")
@example(b"\x00")
@example(b",,\n,,\n")
@example(b"A\n\n\n")
@example(b'"')
@example(b"#\n#\n")
def test_no_bytes_make_it_fall_over(raw):
    check(raw)


@given(st.text(alphabet="AB12.,;<>-# \n\"'/:\t\u00a0", max_size=120))
def test_no_text_makes_it_fall_over(text):
    check(text.encode())
