"""Probe: what a durable write costs on a disk, so that the time of a rehearsal can be judged."""

from __future__ import annotations

import os
import tempfile
import time
from pathlib import Path
from statistics import median

from daq.storage.trouble import rim

TRIES = 41
BYTES = 512


def durable_write_s(folder: Path) -> float:
    """Return the median time of appending 512 bytes and making them durable, below a folder [s]."""
    with rim(folder), tempfile.TemporaryFile(dir=folder) as file:
        times = [_one_s(file.fileno()) for _ in range(TRIES)]
    return median(times)


def _one_s(handle: int) -> float:
    began_s = time.perf_counter()
    os.write(handle, bytes(BYTES))
    os.fsync(handle)
    return time.perf_counter() - began_s
