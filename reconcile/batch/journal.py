"""What a run in parts has done so far: enough to go on after any interruption, and to refuse what does not fit."""

from __future__ import annotations

import json
import os
import shutil
from collections.abc import Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any

from ..errors import InputError, Problem
from .work import fingerprint

__all__ = ["FOLDER", "Journal"]

FOLDER = ".parts"
_NAME = "journal.jsonl"


class Journal:
    """Parts that are whole, one a line, below a first line that says what they are parts of.

    Parameters
    ----------
    target : Path
        Folder of the results; parts go into a folder of their own in it.
    plan : mapping
        Everything that the bytes depend on.
    """

    def __init__(self, target: Path, plan: Mapping[str, Any]) -> None:
        self.target = target
        self.folder = target / FOLDER
        self.path = self.folder / _NAME
        self.plan = dict(plan)
        self.done: dict[int, dict[str, Any]] = {}
        self._lock: Any = None

    def open(self, *, restart: bool) -> None:
        """Begin, or take up what an interrupted run left.

        Raises
        ------
        InputError
            If what is there belongs to another input, or another run is at work here.
        OSError
            If the folder cannot be written.
        """
        self.folder.mkdir(parents=True, exist_ok=True)
        self._take_lock()
        if restart:
            self.clear()
        plan, done = self._read()
        if plan is not None and plan != self.plan:
            raise InputError(
                Problem(
                    "parts-of-another-run",
                    f"{str(self.target)!r} holds the parts of an interrupted run with {_differences(plan, self.plan)}",
                    "put that back and give the same command to finish it, or add --restart to throw its parts away",
                )
            )
        if plan is None:
            self.clear()
            self._append(self.plan)
        self.done = {number: line for number, line in done.items() if self._whole(line)}

    def add(self, line: Mapping[str, Any]) -> None:
        """Record a part that is whole."""
        self._append(line)
        self.done[int(line["part"])] = dict(line)

    def clear(self) -> None:
        """Throw all parts away, the journal first."""
        self.path.unlink(missing_ok=True)
        for entry in self.folder.iterdir():
            if entry.is_dir():
                shutil.rmtree(entry)
            elif entry.name != "lock":
                entry.unlink()

    def finish(self) -> None:
        """Remove the folder of the parts, and that of the results where it holds none."""
        self.clear()
        self.close()
        shutil.rmtree(self.folder, ignore_errors=True)
        with suppress(OSError):
            self.target.rmdir()  # only where it is empty

    def close(self) -> None:
        """Let another run begin here."""
        if self._lock is not None:
            self._lock.close()
            self._lock = None

    def _take_lock(self) -> None:
        try:
            import fcntl
        except ImportError:  # pragma: no cover - systems without file locks of this kind
            return
        self._lock = (self.folder / "lock").open("w")
        try:
            fcntl.flock(self._lock, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            self.close()
            raise InputError(
                Problem("already-running", f"another run is writing into {str(self.target)!r}", "wait for it to end")
            ) from None

    def _append(self, line: Mapping[str, Any]) -> None:
        text = json.dumps(line, ensure_ascii=False, sort_keys=True) + "\n"
        with self.path.open("a", encoding="utf-8") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())

    def _read(self) -> tuple[dict[str, Any] | None, dict[int, dict[str, Any]]]:
        try:
            lines = self.path.read_text("utf-8").splitlines(keepends=True)
        except FileNotFoundError:
            return None, {}
        found = []
        for text in lines:
            # A line that was being written when the run was killed has no end.
            try:
                found.append(json.loads(text) if text.endswith("\n") else None)
            except ValueError:
                found.append(None)
        good = [line for line in found if line is not None]
        if found and found[-1] is None:
            self._rewrite(good)
        if not good or "part" in good[0]:
            return None, {}
        return good[0], {int(line["part"]): line for line in good[1:]}

    def _rewrite(self, lines: list[dict[str, Any]]) -> None:
        other = self.path.with_suffix(".unfinished")
        other.write_text("".join(json.dumps(x, ensure_ascii=False, sort_keys=True) + "\n" for x in lines), "utf-8")
        os.replace(other, self.path)

    def _whole(self, line: Mapping[str, Any]) -> bool:
        for name, size, digest in line["files"].values():
            path = self.folder / name
            if not path.is_file() or path.stat().st_size != size or fingerprint(path)[1] != digest:
                return False
        return True


def _differences(old: Mapping[str, Any], new: Mapping[str, Any]) -> str:
    """What differs between two plans, in words."""
    words = []
    for key in sorted({*old, *new}):
        a, b = old.get(key), new.get(key)
        if a == b:
            continue
        if isinstance(a, dict) and isinstance(b, dict):
            words += [f"another {k} ({key})" for k in sorted({*a, *b}) if a.get(k) != b.get(k)]
        elif isinstance(a, (int, float, str)) and len(str(a)) < 40:
            words.append(f"{key} {a} instead of {b}")
        else:
            words.append(f"another {key}")
    return ", ".join(words)
