"""How a source of readings is to be understood; what is left open is detected, and echoed."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, fields
from typing import Any

from ..errors import InputError, Location, Problem, Problems, did_you_mean

__all__ = ["LIMIT_PER_KIND", "CappedProblems", "ReadOptions"]

LIMIT_PER_KIND = 20

_CHOICES: dict[str, tuple[str, ...]] = {
    "censored": ("interval", "refuse"),
    "missing_columns": ("refuse", "notice"),
    "repeated_hour": ("both", "first", "second"),
    "duplicates": ("refuse", "first", "last"),
    "interval": ("start", "end", "centre"),
    "shape": ("wide", "long"),
    "decimal": (".", ","),
}


@dataclass(frozen=True)
class ReadOptions:
    """Options of every reader; None means: find out, and say so in the echo.

    Attributes
    ----------
    expected : sequence of str, optional
        Tags that a column is looked for.
    time_column, label_column : str, optional
        Header of the column with stamps, and of the one with names of snapshots.
    delimiter, decimal, thousands, encoding : str, optional
        Of text files.
    units_row : bool, optional
        Whether the row under the header holds units.
    blanks : sequence of str
        Further words for an empty cell.
    bad_words : sequence of str
        Words that a source writes instead of a number when it knows that the reading is bad.
    keep, ignore : sequence of str
        Columns to keep as text, and columns to leave out.
    censored : {"interval", "refuse"}
        What ``<0.05`` becomes: an interval, never a number.
    missing_columns : {"refuse", "notice"}
        What an expected tag without a column is.
    zone : str, optional
        Time zone of stamps that have none, e.g. ``Europe/Berlin``.
    day_first : bool, optional
        Whether ``03/04/2025`` is the third of April.
    repeated_hour : {"both", "first", "second"}, optional
        Which half of the hour that the clocks repeat in autumn is in the file.
    duplicates : {"refuse", "first", "last"}
        Which of several rows with one stamp is kept.
    sort : bool
        Put rows in time order instead of refusing.
    time_unit : str, optional
        Unit of a time column that counts (``s``, ``min``, ``h``, ``d``).
    interval : {"start", "end", "centre"}, optional
        Where in its interval a stamp stands.
    shape : {"wide", "long"}, optional
        A column a tag, or a row a value.
    tag_column, value_column, unit_column, status_column : str, optional
        Headers of a long table.
    good_status : sequence of str
        Words (or codes) of the status column that mean a good reading.
    sheet, query : str, optional
        Sheet of a workbook; query or table name of a database.
    """

    expected: Sequence[str] | None = None
    time_column: str | None = None
    label_column: str | None = None
    delimiter: str | None = None
    decimal: str | None = None
    thousands: str | None = None
    encoding: str | None = None
    units_row: bool | None = None
    blanks: Sequence[str] = ()
    bad_words: Sequence[str] = ()
    keep: Sequence[str] = ()
    ignore: Sequence[str] = ()
    censored: str = "interval"
    missing_columns: str = "refuse"
    zone: str | None = None
    day_first: bool | None = None
    repeated_hour: str | None = None
    duplicates: str = "refuse"
    sort: bool = False
    time_unit: str | None = None
    interval: str | None = None
    shape: str | None = None
    tag_column: str | None = None
    value_column: str | None = None
    unit_column: str | None = None
    status_column: str | None = None
    good_status: Sequence[str] = ("good", "ok", "valid", "0", "192", "")
    sheet: str | None = None
    query: str | None = None

    @classmethod
    def build(cls, options: Mapping[str, Any], where: Location | None = None) -> ReadOptions:
        """Check plain options, as they stand in a case file or a call.

        Raises
        ------
        InputError
            With all unknown names and wrong values at once.
        """
        problems = Problems()
        known = [f.name for f in fields(cls)]
        for name in options:
            if name not in known:
                hint = did_you_mean(name, known) or f"known options: {', '.join(known)}"
                problems.add("unknown-option", f"readings have no option {name!r}", hint, where)
        for name, allowed in _CHOICES.items():
            value = options.get(name)
            if value is not None and value not in allowed:
                words = ", ".join(repr(a) for a in allowed)
                problems.add("option-value", f"option {name} is {value!r}", f"write one of {words}", where)
        for name in ("expected", "blanks", "bad_words", "keep", "ignore", "good_status"):
            if isinstance(options.get(name), str):
                problems.add("option-value", f"option {name} is one text", "write a list of texts", where)
        delimiter = options.get("delimiter")
        if delimiter is not None and (not isinstance(delimiter, str) or len(delimiter) != 1):
            problems.add("option-value", f"option delimiter is {delimiter!r}", "write one character", where)
        problems.raise_if_any()
        return cls(**options)


class CappedProblems(Problems):
    """Collects problems, but of each kind only the first few, and counts the rest."""

    def __init__(self, file: str | None = None, limit: int = LIMIT_PER_KIND) -> None:
        super().__init__(file)
        self.limit = limit
        self._seen: dict[str, int] = {}

    def add(self, code: str, message: str, hint: str = "", where: Location | None = None) -> None:
        """Record one problem, or only count it when its kind is full."""
        count = self._seen.get(code, 0) + 1
        self._seen[code] = count
        if count <= self.limit:
            super().add(code, message, hint, where)

    def raise_if_any(self) -> None:
        """Raise one `InputError`; the last problem of a full kind says how many more there are."""
        try:
            super().raise_if_any()
        except InputError as error:
            shown = list(error.problems)
            for code, count in self._seen.items():
                if count > self.limit:
                    words = f"and {count - self.limit} more of this kind"
                    shown.append(Problem(code, words, "", Location(file=self.file)))
            raise InputError(shown) from None
