"""What one cell of text says: a number, nothing, a limit, a spreadsheet's error, or something that nobody can guess.

Text first, numbers second: a cell is turned into a number only by a grammar that knows the decimal mark.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from .table import Status

__all__ = [
    "BLANKS",
    "SPREADSHEET_ERRORS",
    "CellReader",
    "Marks",
    "ParsedColumn",
    "clean",
    "detect_marks",
    "telling_cells",
]

BLANKS = frozenset({"", "na", "n/a", "nan", "null", "none", "-", "\u2013", "\u2014"})
SPREADSHEET_ERRORS = frozenset(
    {"#div/0!", "#n/a", "#value!", "#ref!", "#name?", "#num!", "#null!", "#getting_data", "#spill!", "#calc!"}
)

# Spaces that spreadsheets put in: no-break, figure, narrow no-break.
_ODD_SPACES = "\u00a0\u2007\u202f"
_SPACE_TABLE = str.maketrans(dict.fromkeys(_ODD_SPACES, " ") | {"\u2212": "-", "\ufeff": " ", "\u200b": " "})
_POINT = re.compile(r"[+-]?(\d+(\.\d*)?|\.\d+)([eE][+-]?\d+)?")
_COMMA = re.compile(r"[+-]?(\d+(,\d*)?|,\d+)([eE][+-]?\d+)?")
_LIMIT = re.compile(r"(<=|>=|<|>|\u2264|\u2265)\s*(.*)")
_GROUPED = {
    mark: re.compile(rf"[+-]?\d{{1,3}}({re.escape(mark)}\d{{3}})+([.,]\d*)?([eE][+-]?\d+)?") for mark in " '.,\u2019"
}
_NUMBER_WITH_UNIT = re.compile(r"([+-]?\d+(?:[.,]\d+)?)\s*([A-Za-z%\u00b0\u00b5\u03bc][^\d]*)")


def clean(text: str) -> str:
    """Return the text without outer spaces, its odd spaces made plain, its minus sign made ASCII."""
    if not text.isascii():
        text = text.translate(_SPACE_TABLE)
    return text.strip()


def _counts_as_number(text: str) -> bool:
    return bool(_POINT.fullmatch(text) or _COMMA.fullmatch(text))


@dataclass
class Marks:
    """Decimal and thousands marks of a file, with what was seen of them.

    Attributes
    ----------
    decimal : str
        ``.`` or ``,``.
    thousands : str, optional
        Mark between groups of three digits.
    point, comma : int
        Cells seen that can only be numbers with that decimal mark.
    three_digits : bool
        True when every fractional cell has exactly three digits, so that the mark might part thousands.
    example : str
        One of those cells.
    conflict : bool
        True when both marks are decimal in some cell.
    """

    decimal: str = "."
    thousands: str | None = None
    point: int = 0
    comma: int = 0
    three_digits: bool = False
    example: str = ""
    conflict: bool = False
    undecided: bool = False


_INNER_SPACE = re.compile(r"(?<=\d)[ '\u2019](?=\d{3})")
_THREE = re.compile(r"[+-]?[1-9]\d{0,2}[.,]\d{3}")


def detect_marks(
    cells: Mapping[str, int], *, decimal: str | None, thousands: str | None, comma_is_usual: bool
) -> Marks:
    """Find out which mark is decimal, from cells that hold one.

    Parameters
    ----------
    cells : mapping of str to int
        Cleaned cells that contain a point or a comma, and how often each comes (see `telling_cells`).
    decimal, thousands : str, optional
        Declared marks; they win.
    comma_is_usual : bool
        True for files parted by semicolons, in which a comma is decimal by custom (common practice, no source).
    """
    sure: Counter[str] = Counter()  # decimal for certain
    maybe: Counter[str] = Counter()  # decimal, or thousands
    grouping: Counter[str] = Counter()  # thousands for certain
    examples: dict[str, str] = {}
    for cell, times in cells.items():
        text = _INNER_SPACE.sub("", cell.lstrip("<>=\u2264\u2265 "))
        has_point, has_comma = "." in text, "," in text
        if has_point and has_comma:
            last = "." if text.rfind(".") > text.rfind(",") else ","
            other = "," if last == "." else "."
            if text.count(last) == 1 and _GROUPED[other].fullmatch(text):
                sure[last] += times
                grouping[other] += times
        elif has_point or has_comma:
            mark = "." if has_point else ","
            if text.count(mark) > 1:
                if _GROUPED[mark].fullmatch(text):
                    grouping[mark] += times
            elif _THREE.fullmatch(text):
                maybe[mark] += times
                examples.setdefault(mark, text)
            elif _counts_as_number(text):
                sure[mark] += times
    marks = Marks(point=sure["."] + maybe["."], comma=sure[","] + maybe[","])
    if thousands is not None:
        marks.thousands = thousands
        marks.decimal = decimal or ("," if thousands == "." else ".")
        return marks
    if decimal is not None:
        marks.decimal = decimal
        other = "," if decimal == "." else "."
        if grouping[other] and not sure[other]:
            marks.thousands = other
        return marks
    if sure["."] and sure[","]:
        marks.conflict = True
        marks.decimal = "," if sure[","] > sure["."] else "."
        return marks
    for mark, other in ((".", ","), (",", ".")):
        if sure[mark] or grouping[other]:
            marks.decimal = mark
            # Cells like 1,250 beside cells like 3.7: the comma parts thousands.
            if grouping[other] or maybe[other]:
                marks.thousands = other
            return marks
    if maybe["."] and maybe[","]:
        marks.conflict = True
    elif maybe[","]:
        marks.decimal = ","
        marks.three_digits = True
        marks.example = examples[","]
        marks.undecided = not comma_is_usual
    elif maybe["."]:
        marks.three_digits = True
        marks.example = examples["."]
    elif comma_is_usual:
        marks.decimal = ","
    return marks


def telling_cells(columns: Iterable[Sequence[str]]) -> Counter[str]:
    """Return the cells that tell about marks, with their numbers.

    Of a column that is all numbers with a point, one cell speaks for all.
    """
    out: Counter[str] = Counter()
    for column in columns:
        cells = [c for c in column if "." in c or "," in c]
        if not cells:
            continue
        if "," not in "".join(cells) and _floats(cells) is not None:
            sure = next((c for c in cells if not _THREE.fullmatch(c.strip())), cells[0])
            out[sure.strip()] += len(cells)
        else:
            out.update(clean(c) for c in cells)
    return out


def _floats(cells: Sequence[str]) -> npt.NDArray[np.float64] | None:
    try:
        return np.fromiter(map(float, cells), dtype=np.float64, count=len(cells))
    except ValueError:
        return None


@dataclass
class ParsedColumn:
    """A column of text turned into numbers.

    Attributes
    ----------
    values : (N,) float64
    status : (N,) int8
    lower, upper : dict of row to float
        Intervals of the censored cells.
    reasons : dict of row to str
    faults : list of (row, code, message, hint)
        Cells that could not be understood.
    failed_formulas : dict of row to str
        Cells in which a spreadsheet left an error.
    blank_words : Counter
        Words that stood for an empty cell.
    """

    values: npt.NDArray[np.float64]
    status: npt.NDArray[np.int8]
    lower: dict[int, float] = field(default_factory=dict)
    upper: dict[int, float] = field(default_factory=dict)
    reasons: dict[int, str] = field(default_factory=dict)
    faults: list[tuple[int, str, str, str]] = field(default_factory=list)
    failed_formulas: dict[int, str] = field(default_factory=dict)
    blank_words: Counter[str] = field(default_factory=Counter)


class CellReader:
    """Reads columns of text with one set of marks.

    Parameters
    ----------
    marks : Marks
    blanks, bad_words : sequence of str
        Further words for an empty cell, and for a reading that its source calls bad; case does not matter.
    censored : {"interval", "refuse"}
    """

    def __init__(
        self, marks: Marks, blanks: Sequence[str] = (), bad_words: Sequence[str] = (), censored: str = "interval"
    ) -> None:
        self.marks = marks
        self.blanks = BLANKS | {b.strip().casefold() for b in blanks}
        self.bad_words = {b.strip().casefold() for b in bad_words}
        self.censored = censored
        self._pattern = _COMMA if marks.decimal == "," else _POINT

    def number(self, text: str) -> float | None:
        """Return the number that a cleaned cell holds, or None."""
        if self._pattern.fullmatch(text):
            # With a declared thousands mark, "1.250" never reaches this line as a decimal: the marks differ.
            return float(text.replace(",", ".")) if self.marks.decimal == "," else float(text)
        thousands = self.marks.thousands
        for mark in ([thousands] if thousands else []) + [" ", "'", "\u2019"]:
            if mark in text and mark in _GROUPED and _GROUPED[mark].fullmatch(text):
                bare = text.replace(mark, "")
                if self._pattern.fullmatch(bare):
                    return float(bare.replace(",", "."))
        return None

    def column(self, cells: Sequence[str]) -> ParsedColumn:
        """Read one column.

        Parameters
        ----------
        cells : sequence of str, length N
            Text as it stands in the source.
        """
        fast = self._all_numbers(cells)
        if fast is not None:
            return ParsedColumn(fast, np.zeros(len(cells), dtype=np.int8))
        out = ParsedColumn(np.full(len(cells), np.nan), np.zeros(len(cells), dtype=np.int8))
        for row, raw in enumerate(cells):
            text = clean(raw)
            value = self.number(text)
            if value is not None and np.isfinite(value):
                out.values[row] = value
            else:
                self._odd(out, row, text)
        return out

    def _all_numbers(self, cells: Sequence[str]) -> npt.NDArray[np.float64] | None:
        joined = "".join(cells)
        # float() is more generous than we may be: underscores, digits of other scripts, inf.
        if not joined.isascii() or "_" in joined or self.marks.thousands is not None:
            return None
        if self.marks.decimal == ",":
            if "." in joined:
                return None
            cells = [c.replace(",", ".") for c in cells]
        values = _floats(cells)
        return values if values is not None and np.isfinite(values).all() else None

    def _odd(self, out: ParsedColumn, row: int, text: str) -> None:
        folded = text.casefold()
        if folded in self.blanks:
            out.status[row] = Status.MISSING
            out.blank_words[text] += 1
        elif folded in self.bad_words:
            out.status[row] = Status.BAD_SOURCE
            out.reasons[row] = f"the source says {text!r}"
        elif folded in SPREADSHEET_ERRORS:
            out.status[row] = Status.BAD_SOURCE
            out.reasons[row] = f"the cell's formula failed in the spreadsheet ({text})"
            out.failed_formulas[row] = text
        elif (found := _LIMIT.fullmatch(text)) is not None:
            self._limit(out, row, text, found.group(1), found.group(2).strip())
        else:
            out.faults.append((row, *self._complain(text)))

    def _limit(self, out: ParsedColumn, row: int, text: str, sign: str, rest: str) -> None:
        limit = self.number(rest)
        if limit is None and (found := _NUMBER_WITH_UNIT.fullmatch(rest)) is not None:
            words = f"{text!r} is a limit with its own unit, {found.group(2).strip()!r}"
            hint = "write the limit in the unit of the column, without the unit"
            out.faults.append((row, "limit-unit", words, hint))
            return
        if limit is None:
            out.faults.append((row, *self._complain(text)))
            return
        if self.censored == "refuse":
            hint = "declare censored = interval (the default), or write a value and give it a sigma"
            out.faults.append((row, "censored-cell", f"{text!r} is a limit, not a number", hint))
            return
        below = sign in ("<", "<=", "\u2264")
        if below and limit == 0:
            hint = "write the limit of detection of the method, in the unit of the column"
            out.faults.append((row, "limit-zero", f"{text!r}: a limit of detection of 0 cannot be", hint))
            return
        if below:
            # What has a limit of detection is not negative: the value lies between nothing and the limit.
            out.lower[row], out.upper[row] = (0.0 if limit > 0 else -np.inf), limit
            out.status[row] = Status.CENSORED_LOW
            out.reasons[row] = f"below the limit {rest}"
        else:
            out.lower[row], out.upper[row] = limit, np.inf
            out.status[row] = Status.CENSORED_HIGH
            out.reasons[row] = f"above the limit {rest}"

    def _complain(self, text: str) -> tuple[str, str, str]:
        decimal = self.marks.decimal
        other = "," if decimal == "." else "."
        if text.lstrip("+-").casefold() in ("inf", "infinity"):
            return "not-finite", f"{text!r} is not a finite number", "leave the cell empty if there is no reading"
        other_pattern = _COMMA if other == "," else _POINT
        if other_pattern.fullmatch(text) or (other in text and _GROUPED[other].fullmatch(text)):
            return (
                "decimal-mark",
                f"{text!r} has the mark {other!r}, but the decimal mark of this file is {decimal!r}",
                f"write one decimal mark in all rows, or declare decimal = {other!r}, or thousands = {other!r}",
            )
        found = _NUMBER_WITH_UNIT.fullmatch(text)
        if found is not None:
            return (
                "unit-in-cell",
                f"{text!r} is a number with {found.group(2).strip()!r} behind it",
                "put the unit in the header or in a row of units, and only the number in the cell",
            )
        return (
            "text-in-number",
            f"{text!r} is not a number",
            (
                "accepted blanks: empty, NA, NaN, null, -; put remarks in a column named note, "
                "or list the word under blanks or bad_words"
            ),
        )
