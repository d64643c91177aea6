"""Figures as functions: each takes results or arrays and returns a `Figure` for a page, a notebook or a file."""

from __future__ import annotations

from .adjustments import adjustments
from .balances import balances
from .bias_track import bias_track, bias_tracks
from .closure_against_flow import closure_against_flow, error_against_flow
from .detectability import detectability
from .evidence import evidence, evidence_over
from .look_alikes import correlation_of, look_alikes
from .network import network
from .placements import placements
from .series import series, time_series
from .sheet import Figure

__all__ = [
    "Figure",
    "adjustments",
    "balances",
    "bias_track",
    "bias_tracks",
    "closure_against_flow",
    "correlation_of",
    "detectability",
    "error_against_flow",
    "evidence",
    "evidence_over",
    "look_alikes",
    "network",
    "placements",
    "series",
    "time_series",
]
