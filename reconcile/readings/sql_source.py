"""Reads a database: SQLite with the standard library, others through SQLAlchemy (extra ``sql``)."""

from __future__ import annotations

import hashlib
import re
from contextlib import closing
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import InputError, Location, MissingExtra, Problem, did_you_mean
from .frames import finish, raw_from_frame
from .options import CappedProblems, ReadOptions
from .table import ReadingsTable

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["read_sql"]

_PLAIN_NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*(\.[A-Za-z_][A-Za-z0-9_]*)?")


def read_sql(target: str | Path, **options: Any) -> ReadingsTable:
    """Read the rows of a query.

    Parameters
    ----------
    target : str or Path
        An SQLite file, ``sqlite:///file``, or any SQLAlchemy URL. Keep passwords out of case files: most
        databases read them from their own password file or the environment.
    **options
        Fields of `ReadOptions`; `query` holds a SELECT or the name of a table.

    Raises
    ------
    InputError
    MissingExtra
        Without SQLAlchemy, for anything but SQLite.
    """
    from .sources import _hide

    settings = ReadOptions.build(options)
    text = str(target)
    shown = _hide(text) if "://" in text else text
    problems = CappedProblems(shown)
    sqlite = text.removeprefix("sqlite:///") if text.startswith("sqlite:///") else text if "://" not in text else None
    if sqlite is not None:
        frame, query = _sqlite(sqlite, settings, problems)
    else:
        frame, query = _alchemy(text, shown, settings, problems)
    problems.raise_if_any()
    raw = raw_from_frame(frame, shown, settings)
    raw.source_hash = _hash(frame)
    raw.echo.append(f"{shown}: query {' '.join(query.split())[:120]!r}, rows sha256 {raw.source_hash[:12]}...")
    return finish(raw, settings, problems)


def _hash(frame: pd.DataFrame) -> str:
    # A database has no bytes of its own that could be hashed; the rows as delivered stand for it.
    from .frames import cell_text

    digest = hashlib.sha256("\x1f".join(map(str, frame.columns)).encode())
    for row in frame.itertuples(index=False):
        digest.update("\x1f".join(map(cell_text, row)).encode() + b"\n")
    return digest.hexdigest()


def _query(settings: ReadOptions, tables: list[str], problems: CappedProblems) -> str:
    wanted = settings.query
    if wanted is None:
        if len(tables) == 1:
            return f'SELECT * FROM "{tables[0]}"'
        words = f"the database has {len(tables)} tables"
        names = f": {', '.join(tables[:12])}" if tables else ""
        problems.add("query-missing", words + names, "declare query = the name of a table, or a SELECT")
        return ""
    bare = wanted.strip().rstrip(";").strip()
    if _PLAIN_NAME.fullmatch(bare):
        if tables and bare not in tables and "." not in bare:
            hint = did_you_mean(bare, tables) or f"tables: {', '.join(tables[:12])}"
            problems.add("query-table", f"there is no table {bare!r}", hint)
            return ""
        quoted = ".".join(f'"{part}"' for part in bare.split("."))
        return f"SELECT * FROM {quoted}"
    if not re.match(r"(?is)\s*(--[^\n]*\n\s*)*(select|with)\b", bare) or ";" in bare:
        problems.add("query-not-select", f"the query is not one SELECT: {bare[:60]!r}", "readings are only read")
        return ""
    return bare


def _sqlite(path: str, settings: ReadOptions, problems: CappedProblems) -> tuple[pd.DataFrame, str]:
    import sqlite3

    import pandas as pd

    if not Path(path).is_file():
        folder = Path(path).parent
        near = [p.name for p in folder.iterdir()] if folder.is_dir() else []
        words = "there is no such database file"
        raise InputError(Problem("file-missing", words, did_you_mean(Path(path).name, near), Location(file=path)))
    try:
        # Opened read-only: a query must not change what it reads.
        with closing(sqlite3.connect(f"{Path(path).absolute().as_uri()}?mode=ro", uri=True)) as connection:
            found = connection.execute("SELECT name FROM sqlite_master WHERE type IN ('table', 'view') ORDER BY name")
            query = _query(settings, [row[0] for row in found], problems)
            problems.raise_if_any()
            cursor = connection.execute(query)
            columns = [d[0] for d in cursor.description]
            return pd.DataFrame.from_records(cursor.fetchall(), columns=columns), query
    except sqlite3.Error as error:
        problems.add("query-failed", f"the database says: {error}", "try the query in the database's own shell")
        problems.raise_if_any()
        raise AssertionError from error


def _alchemy(url: str, shown: str, settings: ReadOptions, problems: CappedProblems) -> tuple[pd.DataFrame, str]:
    import pandas as pd

    try:
        import sqlalchemy as sa
        from sqlalchemy.exc import SQLAlchemyError
    except ImportError:
        raise MissingExtra("SQLAlchemy", "sql", f"reading {shown}") from None
    try:
        engine = sa.create_engine(url)
    except ModuleNotFoundError as error:
        words = f"the driver {error.name!r} of this database is not installed"
        problems.add("driver-missing", words, f"install it with: pip install {error.name}")
        problems.raise_if_any()
    except SQLAlchemyError as error:
        problems.add("url", f"the URL is not understood ({error})", "write dialect+driver://user@host/database")
        problems.raise_if_any()
    try:
        with engine.connect() as connection:
            inspector = sa.inspect(connection)
            query = _query(settings, sorted(inspector.get_table_names() + inspector.get_view_names()), problems)
            problems.raise_if_any()
            # Sent as it stands (no colon is a parameter); never committed, so nothing can be changed by it.
            result = connection.exec_driver_sql(query)
            return pd.DataFrame.from_records(result.fetchall(), columns=list(result.keys())), query
    except SQLAlchemyError as error:
        words = str(getattr(error, "orig", None) or error).strip().splitlines()[0]
        problems.add("query-failed", f"the database says: {words}", "try the query in the database's own shell")
        problems.raise_if_any()
        raise AssertionError from error
    finally:
        engine.dispose()
