"""What happened: the log of a run as a report tells it, what came again told once."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from datetime import datetime
from typing import Any

MARKED = ("warning", "warning worse", "fault", "left out", "not stored", "noticed", "holding", "note")
TOLD = (*MARKED, "ready", "ended", "pause")
MOST = 14  # of what happened stands on the page

Entry = Mapping[str, Any]


def happened(log: Sequence[Entry]) -> list[dict[str, str]]:
    """Return when and what, in order and few enough for a page; what comes again says how often."""
    told = list(_once([entry for entry in log if entry.get("event") in TOLD]))
    if len(told) <= MOST:
        return told
    more = f"and {len(told) - MOST + 1} more from here on, see `tercet log`"
    return [*told[: MOST - 1], {"utc": told[MOST - 1]["utc"], "text": more}]


def marks_h(log: Sequence[Entry]) -> list[float]:
    """Return when something was noticed, in hours since the first entry of the log."""
    times = [
        (entry, datetime.fromisoformat(entry["utc"]))
        for entry in log
        if entry.get("utc") and entry.get("run_ns")
    ]
    return [(at - times[0][1]).total_seconds() / 3600 for entry, at in times if entry["event"] in MARKED]


def _once(found: Sequence[Entry]) -> Iterator[dict[str, str]]:
    same: dict[str, list[str]] = {}
    for entry in found:
        same.setdefault(_text(entry), []).append(str(entry.get("utc", "")))
    for text, times in same.items():
        again = f" ({len(times)} times, until {times[-1][11:19]})" if len(times) > 1 else ""
        yield {"utc": times[0], "text": f"{text}{again}"}


def _text(entry: Entry) -> str:
    return str(
        entry.get("text") or f"{str(entry['event']).capitalize()}: {entry.get('reason', '')}".rstrip(": ")
    )
