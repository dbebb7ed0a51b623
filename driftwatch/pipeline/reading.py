"""What a channel hands to the station."""

from __future__ import annotations

from dataclasses import dataclass

from driftwatch.records import Health, Measurement


@dataclass(frozen=True, slots=True)
class Reading:
    """A body that is ready, with its place in the order of things."""

    ready: int  # stream index at which it could be known: fixed by the grids, not by how the samples arrived
    time_ns: int  # stream time that it speaks of
    body: Measurement | Health | None  # None: a second of samples has passed
