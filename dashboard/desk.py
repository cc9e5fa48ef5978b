"""What the page says of a lab: what is booked, whether it can start, and how an operator books once more."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from datetime import datetime
from pathlib import Path
from typing import Any

from daq.storage.feed import DESK, read_feed
from daq.storage.people import Person
from dashboard.operate import request_line
from dashboard.times import day_and_clock
from dashboard.words import capital, stopped

OLD_AFTER_S = 60.0
BOOK_WILL = (
    "The service starts this run at that time, if it is armed then, nothing else is running, and nobody has "
    "cancelled it. Arming is done at the bench, with `tercet arm`; a rig that is simulated needs none."
)
CANCEL_WILL = "The booking is taken back. A run that it has started goes on."
_READY = {
    "armed": "Armed.",
    "simulated": "Simulated hardware: needs no arming.",
    "not armed": "Not armed: skipped unless somebody arms it at the bench.",
}


def desk_stamp(folder: Path, now: datetime) -> str:
    """Return all that the page says of a lab as one text, the same as long as nothing changes."""
    told = read_feed(folder, DESK)
    if told is None or told.get("format") != 1:
        return ""
    written = datetime.fromisoformat(told.pop("written_utc"))
    return json.dumps(told | {"old": (now - written).total_seconds() > OLD_AFTER_S})


def desk_view(
    stamp: str, person: Person, requests: Sequence[Mapping[str, Any]] = ()
) -> dict[str, Any] | None:
    """Return what is booked in a lab, as sentences, what was asked of it, and what an operator may do."""
    if not stamp:
        return None
    told = json.loads(stamp)
    operator = person.may("operator") and not told["old"]
    return {
        "lines": [_line(one, operator) for one in told["bookings"]],
        "says": _says(told),
        "asked": [request_line(request) for request in reversed(requests)] if operator else [],
        "starts": [
            stopped(f"{capital(one['outcome'])} ({day_and_clock(one['due_utc'])})") for one in told["starts"]
        ],
        "form": {"files": told["files"], "will": BOOK_WILL} if operator and told["files"] else None,
    }


def _says(told: Mapping[str, Any]) -> str:
    if told["old"]:
        return "No service looks after this lab at the moment: nothing that is booked will start."
    return "" if told["bookings"] else "Nothing is booked."


def _line(one: Mapping[str, Any], operator: bool) -> dict[str, Any]:
    end = f", over by {one['end_at']}" if one["end_at"] else ""
    following = f"next start {day_and_clock(one['next_utc'])}" if one["next_utc"] else "no further start"
    days = ", ".join(one["days"])
    says = f"{one['name']}: {days} at {one['at']} {one['zone']}{end}; {following}. Booked by {one['who']}."
    number = str(one["number"])
    cancel = {"what": "cancel", "label": "Cancel", "will": CANCEL_WILL, "about": number, "run": ""}
    return {
        "says": says,
        "ready": _READY.get(one["ready"], f"Cannot start: {one['ready']}"),
        "cancel": cancel if operator else None,
    }
