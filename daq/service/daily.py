"""Daily: a lab's day in words for the digest, and the word before a night that gives silence a meaning."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

from daq.estimate.blinding import Blinding
from daq.service.calendar import coming
from daq.service.desk import desk
from daq.service.settings import Messages
from daq.storage.feed import read_feed
from daq.storage.lab import runs
from daq.storage.lab_book import select
from daq.storage.lock import is_written

READY = ("armed", "simulated")
HOLDING = "holding"
SILENCE = (
    "Silence until then says that nothing needs you, or that nothing can be sent: the listener of the "
    "heartbeat (`tercet listen`) tells the one from the other."
)


def summary_of(lab: Path, zone: str, now: datetime) -> str:
    """Return what ran in a lab in the last day, what waits and what is armed; local times with their zone."""
    since = (now - timedelta(days=1)).timestamp()
    ran = [line for folder in runs(lab) for line in _run_lines(folder, since)]
    ran += [
        f"Booking {row['booking']}, due {_local(row['due_utc'], zone)}: {row['outcome']}."
        for row in select(lab, "starts")
        if not row["run"] and datetime.fromisoformat(row["utc"]).timestamp() >= since
    ]
    parts = {
        "Ran in the last day": ran or ["Nothing. The service is well."],
        "Waits": [_coming(one, zone) for one in _booked(lab, now)] or ["Nothing is booked."],
        "Armed": list(_armed(lab, zone, now)) or ["Nothing."],
    }
    return "\n".join(line for title, lines in parts.items() for line in (f"{title}:", *lines, "")).rstrip()


def evening_word(lab: Path, messages: Messages, now: datetime) -> tuple[str, str] | None:
    """Return subject and text of the word before a night; None where nothing runs or starts in it."""
    morning, zone = coming(messages.digest_at, messages.zone, now), messages.zone
    starting = [one for one in _booked(lab, now) if datetime.fromisoformat(one["next_utc"]) <= morning]
    going = [feed for folder in runs(lab) if is_written(folder) and (feed := read_feed(folder))]
    if not (starting or going):
        return None
    well = all(one["ready"] in READY for one in starting) and all(feed["state"] != HOLDING for feed in going)
    word = "armed and well" if well else "NOT ready for the night"
    following = f"next word at {_local(morning.isoformat(), zone)}"
    lines = [line for feed in going for line in _feed_lines(feed)] + [_coming(one, zone) for one in starting]
    lines += [] if well else ["What is not armed is skipped; what holds goes on when its cause is gone."]
    return f"tercet: {word}, {following}", "\n".join([*lines, SILENCE])


def _booked(lab: Path, now: datetime) -> list[dict[str, Any]]:
    return [one for one in desk(lab, now)["bookings"] if one["next_utc"]]


def _coming(booking: Mapping[str, Any], zone: str) -> str:
    when = _local(booking["next_utc"], booking["zone"] or zone)
    return f"{booking['name']} starts {when} (booking {booking['number']}): {booking['ready']}."


def _armed(lab: Path, zone: str, now: datetime) -> Iterator[str]:
    for row in select(lab, "armings", "used_utc IS NULL"):
        if datetime.fromisoformat(row["expires_utc"]) > now:
            yield f"{row['file']}, by {row['who']}, for one start until {_local(row['expires_utc'], zone)}."


def _local(utc: str, zone: str) -> str:
    return f"{datetime.fromisoformat(utc).astimezone(ZoneInfo(zone)):%Y-%m-%d %H:%M} {zone}"


def _run_lines(folder: Path, since: float) -> Iterator[str]:
    feed = read_feed(folder)
    if feed is not None and datetime.fromisoformat(feed["written_utc"]).timestamp() >= since:
        yield from _feed_lines(feed)


def _feed_lines(feed: Mapping[str, Any]) -> Iterator[str]:
    kappa, ended = feed["kappa"], feed["ended"]
    state = f"ended ({ended['reason']})" if ended else feed["state"]
    yield f"{feed['run']}: {state}, {kappa['pairs']} of {kappa['planned_pairs']} pairs."
    if kappa["se"] is not None and kappa["value"] is not None:  # what is hidden is not in the feed
        name = "kappa + offset" if Blinding(str(feed["blinding"])).hides else "kappa"
        yield f"  {name} = {kappa['value']:+.2e} ± {kappa['se']:.2e}"
    yield from (f"  ! {one['what']} {one['good']}" for one in feed["warnings"])
