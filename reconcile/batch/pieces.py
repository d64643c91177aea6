"""A log in pieces: what its head says about it, and then so many rows at a time, without ever holding it whole."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from glob import glob, has_magic
from pathlib import Path
from typing import Any

import numpy as np

from ..errors import InputError, Location, Problem
from ..readings.csv_text import Records, split_records
from ..readings.options import ReadOptions
from .heads import Layout, Unsuited, head_of, parquet_library, vanished

__all__ = ["Log", "Piece", "open_log", "records_of"]

READ = 1 << 22


@dataclass(frozen=True)
class Piece:
    """Some rows of one file: raw bytes of whole lines, or a table of the columnar library."""

    layout: Layout
    rows: int
    line: int
    row: int
    data: Any


@dataclass(frozen=True)
class Log:
    """One file or several in a row.

    Attributes
    ----------
    files : tuple of Path
        In the order of their rows.
    layouts : tuple of Layout
    rows : tuple of int
        Of each file.
    hashes : tuple of str
        SHA-256 of each file.
    sizes, stamps : tuple of int
        Size and time of change when they were hashed.
    """

    files: tuple[Path, ...]
    layouts: tuple[Layout, ...]
    rows: tuple[int, ...]
    hashes: tuple[str, ...]
    sizes: tuple[int, ...]
    stamps: tuple[int, ...]

    @property
    def size(self) -> int:
        """Rows of all files."""
        return sum(self.rows)

    @property
    def source_hash(self) -> str:
        """Hash of the input, as the way through memory computes it."""
        return self.hashes[0] if len(self.hashes) == 1 else hashlib.sha256("".join(self.hashes).encode()).hexdigest()

    def unchanged(self) -> None:
        """Raise an `InputError` if a file is gone or was changed since it was hashed."""
        for path, size, stamp in zip(self.files, self.sizes, self.stamps, strict=True):
            try:
                now = path.stat()
            except OSError as error:
                raise vanished(path, error) from None
            if (now.st_size, now.st_mtime_ns) != (size, stamp):
                raise InputError(
                    Problem(
                        "source-changed",
                        "the file was changed while it was being read",
                        "let it be written to its end, and run again",
                        Location(file=str(path)),
                    )
                )

    def chunks(self, size: int, wanted: Sequence[bool]) -> Iterator[tuple[int, list[Piece]]]:
        """Pieces of each chunk of `size` rows (the last one has fewer); chunks not wanted are passed over unread."""
        number, held, gathered = 0, 0, []
        for layout, path, rows in zip(self.layouts, self.files, self.rows, strict=True):
            done = 0
            try:
                cursor = _ParquetRows(path) if layout.encoding == "" else _Lines(path, layout)
            except OSError as error:
                raise vanished(path, error) from None
            try:
                while done < rows:
                    take = min(size - held, rows - done)
                    data = cursor.take(take, keep=wanted[number])
                    gathered.append(Piece(layout, take, layout.body_line + done, done, data))
                    done, held = done + take, held + take
                    if held == size:
                        if wanted[number]:
                            yield number, gathered
                        number, held, gathered = number + 1, 0, []
            except OSError as error:
                raise vanished(path, error) from None
            finally:
                cursor.close()
        if held and wanted[number]:
            yield number, gathered


# ------------------------------------------------------------------ opening


def open_log(
    target: str | Path, options: Mapping[str, Any], tags: Sequence[str], own: Mapping[str, Any], least: int
) -> Log:
    """Look at the head of every file, count rows and hash.

    Parameters
    ----------
    target : str or Path
        A file or a pattern.
    options : mapping
        Options of the readings, as the case gives them.
    tags : sequence of str
        Columns wanted.
    own : mapping
        Readers that plugins bring; their sources are not worked through in pieces.
    least : int
        Fewer rows than this are not worth it.

    Raises
    ------
    Unsuited
        If the way through memory has to be taken.
    InputError
        If a file is missing.
    """
    text = str(target)
    if "://" in text:
        raise Unsuited("a database is read whole")
    several = has_magic(text) and not Path(text).exists()
    names = sorted(glob(text, recursive=True)) if several else [text]
    if not names:
        raise InputError(Problem("file-missing", f"no file matches {text!r}", "check folder and pattern"))
    settings = ReadOptions.build({**options, "expected": tags})
    if settings.shape == "long":
        raise Unsuited("a long table is turned into a wide one as a whole")
    if settings.sort or settings.duplicates != "refuse":
        raise Unsuited("sorting rows, or choosing between rows with one stamp, needs all of them")
    if settings.zone is not None and not settings.zone.startswith(("UTC", "Etc/")):
        raise Unsuited(f"zone {settings.zone} changes its clocks, which is judged on all stamps together")
    paths = [Path(n) for n in names]
    if least and sum(_size(p) for p in paths) < 2 * least:
        raise Unsuited("")
    layouts = []
    for path in paths:
        if path.suffix.casefold() in own:
            raise Unsuited(f"files ending in {path.suffix!r} are read whole")
        layouts.append(head_of(path, settings))
    order = _order(layouts)
    paths, layouts = [paths[i] for i in order], [layouts[i] for i in order]
    counted = [_count(p, layout) for p, layout in zip(paths, layouts, strict=True)]
    rows, hashes, sizes, stamps = zip(*counted, strict=True)
    if sum(rows) < max(least, 1):
        raise Unsuited("")
    return Log(tuple(paths), tuple(layouts), rows, hashes, sizes, stamps)


def _size(path: Path) -> int:
    try:
        return path.stat().st_size
    except FileNotFoundError:
        raise Unsuited("") from None  # the other way has the words for it
    except OSError as error:
        raise vanished(path, error) from None


def _order(layouts: Sequence[Layout]) -> list[int]:
    """Files by their first stamp, as the way through memory puts them; by name without stamps."""
    first = layouts[0]
    for other in layouts[1:]:
        if set(other.tags) != set(first.tags) or (other.time is None) != (first.time is None):
            raise Unsuited("the files differ in their columns")
        if any(first.table.units.get(t, u) != u for t, u in other.table.units.items()):
            raise Unsuited("the files differ in their units")
    if first.time is None or len(layouts) == 1:
        return list(range(len(layouts)))
    starts = [x.table.time[0] for x in layouts if x.table.time is not None]
    if len({s.tz is None for s in starts}) > 1:
        raise Unsuited("some files have stamps with a zone, others without")
    return sorted(range(len(layouts)), key=lambda i: (starts[i], layouts[i].name))


def _count(path: Path, layout: Layout) -> tuple[int, str, int, int]:
    """Rows, hash, size and time of change of a file; refuses what has to be read as a whole."""
    digest = hashlib.sha256()
    lines, offset, before, end = 0, 0, -1, b"\n"
    blank, blanks, filled = 0, 0, 0
    try:
        state = path.stat()
        with path.open("rb") as file:
            while block := file.read(READ):
                digest.update(block)
                if layout.encoding:
                    data = np.frombuffer(end + block, dtype=np.uint8)
                    ends = np.flatnonzero(data[1:] == 10)
                    gaps = np.diff(ends + offset, prepend=before)
                    empty = (gaps == 1) | ((gaps == 2) & (data[ends] == 13))
                    whole = lines + 1 + np.flatnonzero(empty)
                    below = whole[whole >= layout.body_line]
                    blank, blanks = blank or int(below[0] if below.size else 0), blanks + below.size
                    full = np.flatnonzero(~empty)
                    filled = lines + 1 + int(full[-1]) if full.size else filled
                    lines += ends.size
                    before = int(ends[-1]) + offset if ends.size else before
                    offset, end = offset + len(block), block[-1:]
    except OSError as error:
        raise vanished(path, error) from None
    stamp = digest.hexdigest(), state.st_size, state.st_mtime_ns
    if not layout.encoding:
        return int(parquet_library(path).ParquetFile(path).metadata.num_rows), *stamp
    if end != b"\n":
        lines, filled = lines + 1, lines + 1
    if blanks and blanks != lines - filled:
        raise Unsuited(f"line {blank} is blank")
    return max(filled - layout.body_line + 1, 0), *stamp


# ------------------------------------------------------------------ reading on


class _Lines:
    """Whole lines of a text file, so many at a time."""

    def __init__(self, path: Path, layout: Layout) -> None:
        self.file = path.open("rb")
        self.rest = b""
        self.take(layout.body_line - 1, keep=False)

    def take(self, count: int, *, keep: bool) -> bytes:
        parts: list[bytes] = []
        while count:
            block = self.rest or self.file.read(READ)
            self.rest = b""
            if not block:
                break
            ends = np.flatnonzero(np.frombuffer(block, dtype=np.uint8) == 10)
            if len(ends) >= count:
                cut = int(ends[count - 1]) + 1
                self.rest, block = block[cut:], block[:cut]
                count = 0
            else:
                count -= len(ends)
            if keep:
                parts.append(block)
        return b"".join(parts)

    def close(self) -> None:
        self.file.close()


class _ParquetRows:
    """Rows of a parquet file, so many at a time, whatever the size of its row groups."""

    def __init__(self, path: Path) -> None:
        self.handle = parquet_library(path).ParquetFile(path)
        self.batches = self.handle.iter_batches(batch_size=1 << 15, use_threads=False)
        self.rest: Any = None

    def take(self, count: int, *, keep: bool) -> Any:
        import pyarrow as pa

        parts = []
        while count:
            batch = self.rest if self.rest is not None else next(self.batches, None)
            self.rest = None
            if batch is None:
                break
            if batch.num_rows > count:
                self.rest, batch = batch.slice(count), batch.slice(0, count)
            count -= batch.num_rows
            if keep:
                parts.append(batch)
        return pa.Table.from_batches(parts) if parts else None

    def close(self) -> None:
        self.handle.close()


def records_of(piece: Piece, text: str, problems: Any) -> Records:
    """Records of a piece below the header, with the lines that they have in the file."""
    layout = piece.layout
    found = split_records(text, layout.delimiter, problems)
    lines = [piece.line + n - 1 for n in found.lines]
    return Records([list(layout.header), *found.rows], [layout.body_line - 1, *lines])
