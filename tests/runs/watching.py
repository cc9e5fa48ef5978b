"""Waiting for a run in another process, bounded, without sleeping longer than a reader takes."""

from __future__ import annotations

import subprocess
import time
from pathlib import Path

from daq import open_visits

LONGEST_S = 60.0


def begun(lab: Path, process: subprocess.Popen[bytes] | subprocess.Popen[str]) -> Path:
    """Return the folder of the run that a process has begun in a lab."""
    until_s = time.monotonic() + LONGEST_S
    while time.monotonic() < until_s and process.poll() is None:
        found = list(lab.glob("runs/*/live.json"))
        if found:
            return found[0].parent
    raise AssertionError("the rehearsal did not begin")


def wait_for_rows(folder: Path, rows: int) -> None:
    """Return when a run has so many visits."""
    until_s = time.monotonic() + LONGEST_S
    while time.monotonic() < until_s:
        if open_visits(folder).sizes["row"] >= rows:
            return
    raise AssertionError(f"the rehearsal did not reach {rows} visits")
