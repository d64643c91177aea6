"""Blocks of variables as one vector, and sparse rows over it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import scipy.sparse as sp

from reconcile import Expression, stack

__all__ = ["Key", "Terms", "Vector", "sparse_rows"]

Key = tuple[str, str]
"""Item and quantity."""

Terms = dict[int, float]
"""Column to coefficient: one row."""


class Vector:
    """Blocks of variables put below one another, each entry found by a key."""

    def __init__(self) -> None:
        self.blocks: list[Expression] = []
        self.at: dict[Key, int] = {}

    def add(self, block: Expression, keys: Sequence[Key]) -> None:
        """Put a block below the others; one key for each of its entries."""
        first = len(self.at)
        self.blocks.append(block)
        self.at.update({key: first + i for i, key in enumerate(keys)})

    @property
    def expression(self) -> Expression:
        """All entries as one expression."""
        return stack(self.blocks)


def sparse_rows(terms: Sequence[Mapping[int, float]], columns: int) -> sp.csr_array:
    """Return rows given as column-to-coefficient mappings as a matrix, shape (len(terms), columns)."""
    entries = [(r, c, v) for r, row in enumerate(terms) for c, v in row.items()]
    r, c, v = (np.array(x) for x in zip(*entries, strict=True)) if entries else (np.zeros(0, int),) * 3
    return sp.csr_array((v.astype(float), (r, c)), shape=(len(terms), columns))
