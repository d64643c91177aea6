"""From bytes to records of text: encoding, delimiter, quoted line breaks, true line numbers."""

from __future__ import annotations

import codecs
import csv
import io
from collections.abc import Sequence
from dataclasses import dataclass, field

from ..errors import Location, Problems
from .cells import clean

__all__ = ["Decoded", "Records", "choose_delimiter", "decode", "split_records"]

DELIMITERS = {",": "comma", ";": "semicolon", "\t": "tab", "|": "vertical bar"}
_SAMPLE_RECORDS = 200
_FIELD_LIMIT = 131_072

_NOT_TEXT = (
    (b"PK\x03\x04", "a spreadsheet or zip archive"),
    (b"\xd0\xcf\x11\xe0", "an old binary spreadsheet"),
    (b"\x1f\x8b", "a gzip archive"),
    (b"PAR1", "a parquet file"),
    (b"SQLite format 3\x00", "an SQLite database"),
)


@dataclass(frozen=True)
class Decoded:
    """Text of a file and how it was found.

    Attributes
    ----------
    text : str
        Without byte-order mark.
    encoding : str
    byte_order_mark : bool
    guessed : bool
        True when the bytes do not prove the encoding.
    """

    text: str
    encoding: str
    byte_order_mark: bool = False
    guessed: bool = False


def decode(raw: bytes, encoding: str | None, problems: Problems) -> Decoded | None:
    """Turn bytes into text.

    Parameters
    ----------
    raw : bytes
    encoding : str, optional
        Declared encoding; otherwise the byte-order mark, UTF-8, UTF-16 and Windows-1252 are tried in that order.
    problems : Problems
        Receives what is wrong; then None is returned.
    """
    for magic, what in _NOT_TEXT:
        if raw.startswith(magic):
            problems.add(
                "not-text", f"this is {what}, not a text file", "save it as CSV, or give it its own suffix (.xlsx, ...)"
            )
            return None
    if encoding is not None:
        try:
            text = raw.decode(encoding)
        except LookupError:
            problems.add("encoding", f"encoding {encoding!r} is not known", "write e.g. utf-8, utf-16 or cp1252")
            return None
        except UnicodeDecodeError as error:
            line = raw.count(b"\n", 0, error.start) + 1
            problems.add(
                "encoding",
                f"byte {raw[error.start : error.start + 1]!r} is not {encoding}",
                "leave encoding out to have it detected",
                Location(line=line),
            )
            return None
        marked = text.startswith("\ufeff")
        return Decoded(text[1:] if marked else text, encoding, marked)
    if raw.startswith(codecs.BOM_UTF8):
        return _try(raw[3:], "utf-8", problems, marked=True)
    if raw.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        return _try(raw, "utf-16", problems, marked=True)
    head = raw[:4000]
    if b"\x00" in head:
        even, odd = head[0::2].count(0), head[1::2].count(0)
        if max(even, odd) > 0.7 * len(head) / 2 and 10 * min(even, odd) < max(even, odd):
            return _try(raw, "utf-16-le" if odd > even else "utf-16-be", problems, marked=False)
        problems.add("not-text", "the file has zero bytes: it is not a text file", "save it as CSV (UTF-8)")
        return None
    try:
        return Decoded(raw.decode("utf-8"), "utf-8")
    except UnicodeDecodeError:
        return Decoded(raw.decode("cp1252", errors="replace"), "cp1252", guessed=True)


def _try(raw: bytes, encoding: str, problems: Problems, *, marked: bool) -> Decoded | None:
    try:
        return Decoded(raw.decode(encoding), encoding, marked, guessed=not marked)
    except UnicodeDecodeError as error:
        problems.add(
            "encoding",
            f"the file starts as {encoding}, but byte {error.start} is not: was it cut off, or are two files joined?",
            "export it again",
        )
        return None


@dataclass
class Records:
    """Records of a text file.

    Attributes
    ----------
    rows : list of list of str
        Cells as they stand; blank records and comment lines are left out.
    lines : list of int
        Line on which each record starts, counted from 1.
    blank : int
        Number of blank records left out.
    comments : int
        Number of lines that start with ``#`` above the header.
    """

    rows: list[list[str]] = field(default_factory=list)
    lines: list[int] = field(default_factory=list)
    blank: int = 0
    comments: int = 0


def split_records(text: str, delimiter: str, problems: Problems, limit: int | None = None) -> Records:
    """Split text into records with a true line number each.

    The number of a record is not its line once a quoted cell holds a line break, so the line is taken from the
    reader itself.

    Parameters
    ----------
    text : str
    delimiter : str
    problems : Problems
        Receives quotes that are not closed.
    limit : int, optional
        Stop after so many records.
    """
    out = Records()
    # A lone carriage return and \r\n count as one line end each; other separators inside a cell stay what they are.
    reader = csv.reader(io.StringIO(text, newline=None), delimiter=delimiter, strict=True)
    start = 1
    while True:
        try:
            row = next(reader)
        except StopIteration:
            break
        except csv.Error as error:
            words = str(error)
            if "unexpected end" in words or "field larger" in words:
                message = "a quotation mark is opened here and never closed"
            else:
                message = f"text stands behind a closing quotation mark ({words})"
            problems.add(
                "quote", message, "close it, or double the quotation mark inside a quoted cell", Location(line=start)
            )
            break
        line, start = start, reader.line_num + 1
        if not any(cell and not cell.isspace() for cell in row):
            out.blank += 1
            continue
        if not out.rows and row[0].lstrip().startswith("#") and not row[0].lstrip().startswith("#,"):
            out.comments += 1
            continue
        out.rows.append(row)
        out.lines.append(line)
        if limit is not None and len(out.rows) >= limit:
            break
    return out


def choose_delimiter(text: str, problems: Problems, expected: Sequence[str] | None = None) -> str | None:
    """Find the delimiter, or say why it cannot be found.

    A candidate must part the header into at least two cells and the records into as many. Of two that do, the
    one wins whose cells are more often numbers; if that does not part them, nobody can know.

    Returns
    -------
    str or None
        ``,`` for a file with one column.
    """
    scores: dict[str, tuple[float, float, float]] = {}
    for delimiter in DELIMITERS:
        if delimiter not in text[:100_000]:
            continue
        records = split_records(text, delimiter, Problems(), limit=_SAMPLE_RECORDS)
        if not records.rows:
            continue
        widths = [len(r) for r in records.rows]
        width = max(set(widths), key=lambda w: (widths.count(w), w))
        if width < 2:
            continue
        fits = widths.count(width) / len(widths)
        body = [clean(c) for r in records.rows[1:] for c in r]
        numeric = sum(_looks_numeric(c) for c in body) / max(len(body), 1)
        header = {clean(c) for r in records.rows[:10] for c in r}
        found = len(header & set(expected or ()))
        scores[delimiter] = (found, round(fits, 3), round(numeric, 3)) if expected else (fits, numeric, width)
    if not scores:
        return ","
    ranked = sorted(scores.items(), key=lambda item: item[1], reverse=True)
    if len(ranked) > 1 and ranked[0][1] == ranked[1][1]:
        first, second = (DELIMITERS[d] for d, _ in ranked[:2])
        problems.add(
            "delimiter",
            f"the cells may be parted by {first} or by {second}: both fit all rows",
            f"declare delimiter = {ranked[0][0]!r} or {ranked[1][0]!r}",
            Location(line=1),
        )
        return None
    return ranked[0][0]


def _looks_numeric(cell: str) -> bool:
    bare = cell.lstrip("<>=+-").replace(",", ".", 1)
    return bool(bare) and bare.replace(".", "", 1).isdigit()
