"""Room on the disk: a warning when a night may not fit, a hold before the disk is full."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

from daq.itinerary import Itinerary
from daq.ports import Bench
from daq.storage.layout import CHUNK
from daq.storage.space import free_bytes, needed_bytes

HOLD_BYTES = 1_000_000_000
END_BYTES = 200_000_000


def room_left(folder: Path, bench: Bench | None = None) -> float:
    """Return how much room a run has; the faults of a simulated bench may leave it less than there is."""
    return min(free_bytes(folder), float("inf") if bench is None else bench.free_bytes())


def shortage(folder: Path, hold_bytes: int = HOLD_BYTES, bench: Bench | None = None) -> str:
    """Return a sentence while there is so little room that a run has to hold, else nothing."""
    free = room_left(folder, bench)
    if free >= hold_bytes:
        return ""
    return f"Only {free / 1e9:.2f} GB are free on the disk; the run holds below {hold_bytes / 1e9:g} GB."


def exhausted(folder: Path, end_bytes: int = END_BYTES, bench: Bench | None = None) -> str:
    """Return a sentence when there is so little room that a run has to end cleanly, else nothing."""
    free = room_left(folder, bench)
    if free >= end_bytes:
        return ""
    return f"Only {free / 1e9:.2f} GB are free on the disk; the run ends below {end_bytes / 1e9:g} GB."


def room_warning(folder: Path, visits: int, events: float = 0.0) -> str:
    """Return a sentence when what is left of a night may not fit above the room at which a run holds."""
    free, wanted = free_bytes(folder), wanted_bytes(visits, events)
    if free >= wanted:
        return ""
    wants = f"what is left of the night may want {wanted / 1e9:.2f} GB"
    return f"{free / 1e9:.2f} GB are free on the disk, and {wants}."


def wanted_bytes(visits: int, events: float = 0.0) -> int:
    """Return how much room has to be free for so many visits and events, with what a run holds at."""
    return needed_bytes(visits, CHUNK, round(events)) + HOLD_BYTES


def events_due(itinerary: Itinerary, list_mode: Mapping[str, float] | None) -> float:
    """Return how many events a plan brings in list mode, every channel taken as bright as the detector."""
    if list_mode is None:
        return 0.0
    rates_hz = itinerary.rates_hz[itinerary.position_index, itinerary.opening_index]
    return float(rates_hz @ itinerary.dwell_s) * list_mode["channels"]
