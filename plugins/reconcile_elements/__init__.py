"""Domain `elements`: atoms and charge are conserved, whatever reacts."""

from __future__ import annotations
