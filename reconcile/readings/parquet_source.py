"""Reads parquet files (extra ``parquet``)."""

from __future__ import annotations

import hashlib
import io
from pathlib import Path
from typing import Any

from ..errors import MissingExtra
from .csv_source import read_bytes
from .frames import finish, raw_from_frame
from .options import CappedProblems, ReadOptions
from .table import ReadingsTable

__all__ = ["read_parquet"]


def read_parquet(path: str | Path, **options: Any) -> ReadingsTable:
    """Read a parquet file.

    Parameters
    ----------
    path : str or Path
    **options
        Fields of `ReadOptions`.

    Raises
    ------
    InputError
    MissingExtra
        Without pyarrow.
    """
    settings = ReadOptions.build(options)
    try:
        import pyarrow as pa
        from pyarrow import parquet
    except ImportError:
        raise MissingExtra("pyarrow", "parquet", f"reading {path}") from None
    problems = CappedProblems(str(path))
    data = read_bytes(Path(path), problems)
    try:
        frame = parquet.read_table(io.BytesIO(data)).to_pandas()
    except (pa.ArrowInvalid, OSError) as error:
        problems.add("file-unreadable", f"this is not a parquet file ({str(error).splitlines()[0]})", "export it again")
        problems.raise_if_any()
    raw = raw_from_frame(frame, str(path), settings)
    raw.source_hash = hashlib.sha256(data).hexdigest()
    raw.echo.append(f"{path}: parquet, {len(data)} bytes, sha256 {raw.source_hash[:12]}...")
    return finish(raw, settings, problems)
