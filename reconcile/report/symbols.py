"""Symbols that stand beside the words for readings, so that neither colour nor position is needed."""

from __future__ import annotations

__all__ = ["symbol_of"]

_SYMBOLS = {
    "suspect": "✗",
    "tied": "?",
    "cannot tell": "?",
    "not checked": "○",
    "no reading": "–",
    "left out": "–",
    "sound so far": "✓",
}


def symbol_of(word: str) -> str:
    """Symbol of a reading's word; nothing for words that have none."""
    return _SYMBOLS.get(word, "")
