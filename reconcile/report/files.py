"""Single files that appear whole or not at all."""

from __future__ import annotations

import os
import tempfile
from pathlib import Path

from ..errors import InputError, Problem

__all__ = ["write_whole"]


def write_whole(path: Path, content: bytes) -> None:
    """Write a file under another name, and move it to its own once it is whole.

    Raises
    ------
    InputError
        If it cannot be written; what stood there before stands there still.
    """
    part: str | None = None
    try:
        path.parent.mkdir(parents=True, exist_ok=True)
        handle, part = tempfile.mkstemp(prefix=".unfinished-", dir=path.parent)
        with os.fdopen(handle, "wb") as file:
            file.write(content)
        os.chmod(part, 0o644)
        os.replace(part, path)
    except OSError as error:
        if part is not None and os.path.exists(part):
            os.unlink(part)
        raise InputError(
            Problem(
                "cannot-write",
                f"{str(path)!r} cannot be written: {error.strerror or error}",
                "nothing was written; choose another folder with --out, or make room",
            )
        ) from None
