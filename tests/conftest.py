"""Shared fixtures."""

from __future__ import annotations

import os
from pathlib import Path

# Before numpy is loaded: threads inside products of small matrices only wait for one another.
os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")

import numpy as np
import pytest
from hypothesis import settings

ROOT = Path(__file__).resolve().parent.parent

settings.register_profile("default", deadline=None, derandomize=True, max_examples=50)
settings.load_profile("default")


@pytest.fixture(autouse=True)
def _global_random_state_is_left_alone():
    _, before, place, *_ = np.random.get_state()  # noqa: NPY002 - this is the guard
    before = before.copy()
    yield
    _, after, reached, *_ = np.random.get_state()  # noqa: NPY002
    assert (place, before.tobytes()) == (reached, after.tobytes()), "the global random state was used; pass a Generator"


@pytest.fixture
def datasets() -> Path:
    return ROOT / "datasets"


@pytest.fixture
def write_case(tmp_path):
    """Write a case file (and readings) into a folder of their own; returns the path of the case."""

    def write(text: str, readings: str | None = None, name: str = "case.yaml") -> Path:
        path = tmp_path / name
        path.write_text(text, encoding="utf-8")
        if readings is not None:
            (tmp_path / "readings.csv").write_text(readings, encoding="utf-8")
        return path

    return write
