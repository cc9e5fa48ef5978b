"""Disk space: what a run will need, and what is there."""

from __future__ import annotations

import os
from pathlib import Path

from daq.storage.trouble import rim

# Measured on runs of 1e3 to 1e6 visits, rounded up (tests/benchmarks/bench_storage.py prints them anew).
VISIT_BYTES = 450  # a sealed visit with its share of the metadata
WAITING_BYTES = 1_700  # a visit in the journal and its log, at most one chunk and what a failed seal leaves
EVENT_BYTES = 4  # an event in list mode: a 32-bit gap, before compression
FIXED_BYTES = 40_000_000  # the log before it is cut, the itinerary, report and feed


def needed_bytes(visits: int, chunk: int, events: int = 0) -> int:
    """Return how much room a run takes at most, its journal included."""
    return FIXED_BYTES + visits * VISIT_BYTES + 2 * min(visits, chunk) * WAITING_BYTES + events * EVENT_BYTES


def free_bytes(folder: Path) -> int:
    """Return how much room this user has on the disk of a folder; the folder need not exist yet."""
    existing = next(path for path in (folder.absolute(), *folder.absolute().parents) if path.exists())
    with rim(folder):
        disk = os.statvfs(existing)
    return disk.f_bavail * disk.f_frsize
