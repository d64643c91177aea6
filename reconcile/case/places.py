"""Where each value of a case stands in the user's files."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

from ..errors import Location

__all__ = ["Path", "Places"]

Path = tuple[str | int, ...]


@dataclass
class Places:
    """Map from a path such as ``("meters", "FT-1", "sigma")`` to a place.

    Attributes
    ----------
    file : str
        Name of the case file as the user gave it.
    values, keys : dict of path to (line, column)
        Counted from 1: where the value stands, and where its key stands.
    texts : dict of path to str
        How a number, a truth value or nothing was spelt, since ``010`` may have been meant as a name.
    tables : dict of path to Location
        For what was read from a table file.
    """

    file: str
    values: dict[Path, tuple[int, int]] = field(default_factory=dict)
    keys: dict[Path, tuple[int, int]] = field(default_factory=dict)
    texts: dict[Path, str] = field(default_factory=dict)
    tables: dict[Path, Location] = field(default_factory=dict)

    def where(self, path: tuple[Any, ...], *, key: bool = False) -> Location:
        """Return the place of a value, of the nearest thing around it if it is not there itself.

        Parameters
        ----------
        path : tuple
            Keys and list positions from the top of the file.
        key : bool
            Point at the key instead of its value.

        Returns
        -------
        Location
        """
        tag = str(path[1]) if len(path) > 1 else None
        for end in range(len(path), -1, -1):
            part = tuple(path[:end])
            if part in self.tables:
                return self.tables[part]
            # What is missing inside a block is reported at the block's own key: the user looks for its name.
            wanted = self.keys if (key or end < len(path)) and part in self.keys else self.values
            if part in wanted:
                line, column = wanted[part]
                return Location(self.file, line, column, tag=tag)
        return Location(self.file, tag=tag)

    def text(self, path: tuple[Any, ...], value: Any) -> str:
        """Return a value as the user spelt it."""
        return self.texts.get(tuple(path), str(value))
