"""The desk of a lab: what is booked, told to the page, and bookings that operators ask for there."""

from __future__ import annotations

import json
import logging
from collections.abc import Mapping
from datetime import UTC, datetime
from functools import lru_cache
from pathlib import Path
from typing import Any

from daq.errors import DaqError
from daq.service.arming import is_armed
from daq.service.bookings import Booking, book, bookings, cancel
from daq.service.load import NO_WISHES, load
from daq.service.requests import utc_now
from daq.storage.feed import DESK, write_feed
from daq.storage.lab_book import BOOK, select, update

log = logging.getLogger(__name__)

STARTS_TOLD = 5
LATE_S = 3600.0


def answer_desk(lab: Path) -> None:
    """Carry out what operators asked of the lab rather than of a run, and tell them what became of it."""
    for request in select(lab, "requests", "run = '' AND settled_utc IS NULL"):
        try:
            outcome = _ANSWERS[request["what"]](lab, request)
        except DaqError as error:
            outcome = f"refused: {error}"
        except (KeyError, TypeError, ValueError):
            outcome = "refused: this was not understood"
        update(lab, "requests", request["id"], settled_utc=utc_now(), outcome=outcome)
        log.info("%s asked by %s: %s", request["what"], request["who"], outcome)


def tell_desk(lab: Path) -> None:
    """Write what is booked in a lab, and what became of earlier starts, for its page."""
    try:
        write_feed(lab, desk(lab, datetime.now(UTC)), DESK)
    except DaqError as error:
        log.error("the page is not told: %s", error)


def desk(lab: Path, now: datetime) -> dict[str, Any]:
    """Return what the page shows of a lab: bookings, soonest first, and the last starts."""
    booked = sorted(
        (_booking(lab, one, now) for one in bookings(lab)), key=lambda one: one["next_utc"] or "9"
    )
    files = {row["file"]: Path(row["file"]).stem for row in select(lab, "bookings")}
    return {
        "format": 1,
        "written_utc": now.isoformat(timespec="milliseconds"),
        "bookings": booked,
        "files": [{"file": file, "name": name} for file, name in files.items()],
        "starts": [_start(row) for row in select(lab, "starts")[-STARTS_TOLD:]],
    }


def _booking(lab: Path, one: Booking, now: datetime) -> dict[str, Any]:
    following = one.next_start(now)
    return {
        "number": one.number,
        "name": one.file.stem,
        "days": list(one.times.days),
        "at": f"{one.times.at:%H:%M}",
        "zone": one.times.zone.key,
        "end_at": None if one.end_at is None else f"{one.end_at:%H:%M}",
        "next_utc": None if following is None else following.isoformat(timespec="seconds"),
        "who": one.who,
        "ready": _readiness(lab, one, (lab / BOOK).stat().st_mtime_ns, now.hour, now.minute),
    }


@lru_cache(maxsize=64)
def _readiness(lab: Path, one: Booking, *_when: int) -> str:
    """Return whether the next start could be made: "armed", "simulated", "not armed", or what is wrong.

    Looked at again when the lab book changes, and every minute: descriptions are files that people edit.
    """
    try:
        loaded = load(one.file, one.wishes)
    except DaqError as error:
        return str(error)
    if loaded.rig.simulated:
        return "simulated"
    return "armed" if is_armed(loaded, lab) else "not armed"


def _start(row: Mapping[str, Any]) -> dict[str, Any]:
    return {key: row[key] for key in ("booking", "due_utc", "outcome", "run")}


def _book(lab: Path, request: Mapping[str, Any]) -> str:
    """Book a measurement once more that somebody has booked at the bench before; no other file is read."""
    wanted = json.loads(request["about"])
    known = {row["file"]: row["zone"] for row in select(lab, "bookings")}
    if wanted["file"] not in known:
        return "refused: only what was booked at the bench before can be booked from the page"
    made = book(
        lab,
        Path(wanted["file"]),
        days=["once"],
        at=str(wanted["at"]),
        zone=known[wanted["file"]],
        first_day=str(wanted["day"]),
        late_s=LATE_S,
        end_at=str(wanted["end_by"]) if wanted.get("end_by") else None,
        wishes=NO_WISHES,
        who=request["who"],
    )
    return f"booked as {made.number}"


def _cancel(lab: Path, request: Mapping[str, Any]) -> str:
    cancel(lab, int(request["about"]))
    return f"booking {int(request['about'])} cancelled"


_ANSWERS = {"book": _book, "cancel": _cancel}
