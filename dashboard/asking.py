"""Leaving a request for a run in the lab book: the only thing that the page ever writes."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from daq.errors import StorageError
from daq.storage.lab_book import BOOK, insert, select
from daq.storage.people import Person
from dashboard import lab
from dashboard.operate import ACTS
from dashboard.times import clock

SHOWN = 3
LONGEST_ABOUT = 500
OF_THE_LAB = ("book", "cancel")


def leave(folder: Path, asked: Any, person: Person) -> str:
    """Leave what a person asks of a run, and return a sentence about it.

    Raises
    ------
    PermissionError
        When the person is no operator; the gate asks before, and this asks again.
    """
    if not person.may("operator"):
        raise PermissionError(f"{person.name} is no operator")
    wanted = _understood(folder, asked)
    if wanted is None:
        return "This was not understood, and nothing was asked. Load the page again."
    run, what, about = wanted
    if run and _has_ended(folder, run):
        return "The run has ended meanwhile; nothing was asked."
    utc = datetime.now(UTC).isoformat(timespec="seconds")
    try:
        insert(folder, "requests", run=run, what=what, who=person.name, utc=utc, about=about)
    except StorageError as error:
        return f"Nothing was asked: {error}"
    if not run:
        return f"{what.capitalize()}: asked at {clock(utc)}. The answer appears under Booked."
    return f"{ACTS[what].label}: asked at {clock(utc)}. The run hears it before its next stand."


def requests_of(folder: Path, run: str) -> tuple[dict[str, Any], ...]:
    """Return the newest requests to a run, oldest first."""
    try:
        rows = select(folder, "requests", "run = ?", (run,))
    except StorageError:
        return ()
    return tuple(rows[-SHOWN:])


def book_stamp(folder: Path) -> int:
    """Return a number that changes whenever something is written to the lab book."""
    try:
        return (folder / BOOK).stat().st_mtime_ns
    except OSError:
        return 0


def _understood(folder: Path, asked: Any) -> tuple[str, str, str] | None:
    if not isinstance(asked, Mapping):
        return None
    run, what, about = (asked.get(key, "") for key in ("run", "what", "about"))
    if not all(isinstance(text, str) for text in (run, what, about)) or len(about) > LONGEST_ABOUT:
        return None
    known = what in ACTS and run in lab.run_names(folder) if run else what in OF_THE_LAB
    return (run, what, about) if known else None


def _has_ended(folder: Path, run: str) -> bool:
    try:
        return bool(lab.read(folder, run, lab.stamp(folder, run))["ended"])
    except StorageError:
        return False
