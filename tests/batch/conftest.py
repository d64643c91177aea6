"""The pilot skid of `skid_logs` as a loaded case."""

from __future__ import annotations

import pytest
from skid_logs import SKID

from reconcile import load_case


@pytest.fixture
def skid(tmp_path):
    def make(level=0.05, text=SKID):
        path = tmp_path / "case.yaml"
        path.write_text(text.replace("LEVEL", repr(level)), "utf-8")
        return load_case(path)

    return make
