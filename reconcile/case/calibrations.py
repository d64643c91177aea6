"""Dates on which a meter was calibrated, repaired or exchanged."""

from __future__ import annotations

from datetime import datetime
from typing import Any

from ..errors import Problems
from .places import Places

__all__ = ["read_calibrations"]

_EXAMPLE = "calibrated: [2024-03-01, 2024-05-14T09:30]"


def read_calibrations(value: Any, tag: str, places: Places, problems: Problems) -> tuple[datetime, ...]:
    """Read the key ``calibrated`` of a meter.

    Parameters
    ----------
    value : list or str
        Dates as ISO 8601, with or without time and zone; a text may hold several, parted by commas.
    tag : str
    places : Places
    problems : Problems
        Receives what is no date, and dates that are out of order or stand twice.

    Returns
    -------
    tuple of datetime
        In rising order; without those that were refused.
    """
    path = ("meters", tag, "calibrated")
    if isinstance(value, str):
        entries: list[Any] = [v.strip() for v in value.split(",")]
        spots: list[tuple[Any, ...]] = [path] * len(entries)
    elif isinstance(value, list) and value:
        entries, spots = value, [(*path, i) for i in range(len(value))]
    else:
        problems.add(
            "wrong-type",
            f"calibrated of meter {tag!r} is no list of dates",
            f"write e.g. {_EXAMPLE}",
            places.where(path),
        )
        return ()
    found: list[datetime] = []
    for entry, spot in zip(entries, spots, strict=True):
        text = places.text(spot, entry).strip() if not isinstance(entry, (dict, list)) else ""
        try:
            # Python also takes 20240301, which is as likely a number that slipped in.
            stamp = datetime.fromisoformat(text) if "-" in text else None
        except ValueError:
            stamp = None
        if stamp is None:
            problems.add(
                "not-a-date",
                f"calibrated of meter {tag!r}: {text or entry!r} is no date",
                f"write year-month-day, e.g. {_EXAMPLE}",
                places.where(spot),
            )
        elif found and (stamp.tzinfo is None) != (found[-1].tzinfo is None):
            problems.add(
                "mixed-zones",
                f"calibrated of meter {tag!r}: {text!r} has {'no' if stamp.tzinfo is None else 'a'} time zone, "
                "unlike the one before",
                "give all dates of a meter with a zone, or none",
                places.where(spot),
            )
        elif found and stamp <= found[-1]:
            problems.add(
                "dates-out-of-order",
                f"calibrated of meter {tag!r}: {text!r} does not come after the one before",
                "list the dates from the earliest to the latest, each once",
                places.where(spot),
            )
        else:
            found.append(stamp)
    return tuple(found)
