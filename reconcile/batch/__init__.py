"""A log of any length on one machine: read in pieces, worked through in blocks, written in parts, resumable."""

from .stream import STREAM_FROM, StreamedRun, Unsuited, run_streamed

__all__ = ["STREAM_FROM", "StreamedRun", "Unsuited", "run_streamed"]
