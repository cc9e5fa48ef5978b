"""Remarks: what people add to a run's log; corrected by addition, never by editing."""

from __future__ import annotations

import getpass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from daq.errors import DescriptionError
from daq.estimate.blinding import REVEALED
from daq.storage.blinding import blinding_of
from daq.storage.digest import digest
from daq.storage.log import RunLog, read_log
from daq.storage.reader import open_visits, read_meta


def note(folder: Path, text: str, by: str | None = None) -> dict[str, Any]:
    """Add a person's note to the log of a run and return it."""
    if not text.strip():
        raise DescriptionError(("tercet note: the note is empty. Write what you saw.",))
    read_meta(folder)
    return _add(folder, "note", by, text=text.strip())


def accept(folder: Path, verdict: str, by: str | None = None, remark: str = "") -> dict[str, Any]:
    """Add a person's verdict on a run, bound to its counts by their digest, and return it."""
    visits = open_visits(folder)
    return _add(folder, "verdict", by, verdict=verdict, remark=remark, digest=digest(visits))


def verdict_of(folder: Path) -> dict[str, Any] | None:
    """Return the latest verdict on a run."""
    found = [entry for entry in read_log(folder) if entry["event"] == "verdict"]
    return found[-1] if found else None


def _add(folder: Path, event: str, by: str | None, **fields: Any) -> dict[str, Any]:
    entry = {"utc": datetime.now(UTC).isoformat(timespec="seconds"), "by": by or getpass.getuser(), **fields}
    if blinding_of(folder, read_meta(folder)).state == REVEALED:
        entry["after_unblinding"] = True
    RunLog(folder).append(event, **entry)
    return {"event": event, **entry}
