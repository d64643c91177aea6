from __future__ import annotations

import pytest
from tank_trains import TRAIN


@pytest.fixture
def train(write_case):
    """Path of the tank train; a dict of replacements changes the text."""

    def write(*changes: tuple[str, str], more: str = ""):
        text = TRAIN + more
        for old, new in changes:
            assert old in text
            text = text.replace(old, new)
        return write_case(text)

    return write
