"""Bench records: what a task found, beside its raw visits, in `bench/<task>/<time>/` of a lab."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from datetime import UTC, datetime
from itertools import count
from pathlib import Path
from typing import Any

from daq.storage.begin import plain
from daq.storage.disk import Disk, write_durably
from daq.storage.trouble import rim

BENCH, OUTCOME, STATE = "bench", "outcome.json", "simulated.json"


def new_bench_folder(lab: Path, task: str, utc_ns: int) -> Path:
    """Return a folder for a new record that is not taken yet; a second one of the same second gets "-2"."""
    name = f"{datetime.fromtimestamp(utc_ns // 1_000_000_000, UTC):%Y%m%dT%H%M%SZ}"
    first = lab / BENCH / task / name
    if not first.exists():
        return first
    others = (first.with_name(f"{name}-{number}") for number in count(2))
    return next(folder for folder in others if not folder.exists())


def write_outcome(folder: Path, outcome: Mapping[str, Any], disk: Disk | None = None) -> None:
    """Write what a task found; durable, and never changed afterwards."""
    disk = disk or Disk()
    with rim(folder):
        write_durably(disk, folder / OUTCOME, json.dumps(plain(outcome), indent=1).encode())
        disk.sync_dir(folder)


def outcomes(lab: Path, task: str) -> Iterator[dict[str, Any]]:
    """Yield what is recorded of a task in a lab, newest first; what cannot be read is no record."""
    folder = lab / BENCH / task
    for path in sorted(folder.glob(f"*/{OUTCOME}"), reverse=True):
        try:
            found = json.loads(path.read_text())
        except (OSError, ValueError):
            continue
        if isinstance(found, dict):
            yield found | {"record": f"{task}/{path.parent.name}"}


def keep_state(lab: Path, rig: str, state: bytes) -> None:
    """Keep where a simulated bench stands, for the next task to go on from there."""
    with rim(lab):
        write_durably(Disk(), lab / BENCH / f"{rig}-{STATE}", state)


def kept_state(lab: Path, rig: str) -> bytes | None:
    """Return where a simulated bench was left, if it was."""
    try:
        return (lab / BENCH / f"{rig}-{STATE}").read_bytes()
    except OSError:
        return None
