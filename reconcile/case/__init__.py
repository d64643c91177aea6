"""The case file: what the user wrote, checked, with the place of every word."""

from __future__ import annotations

from .load import read_case
from .references import check_references
from .schema import json_schema
from .spec import (
    BoundSpec,
    CaseSpec,
    DomainModels,
    KnownSpec,
    MeterSpec,
    Settings,
    SharedErrorSpec,
    SigmaPart,
    SigmaSpec,
    StreamSpec,
)

__all__ = [
    "BoundSpec",
    "CaseSpec",
    "DomainModels",
    "KnownSpec",
    "MeterSpec",
    "Settings",
    "SharedErrorSpec",
    "SigmaPart",
    "SigmaSpec",
    "StreamSpec",
    "check_references",
    "json_schema",
    "read_case",
]
