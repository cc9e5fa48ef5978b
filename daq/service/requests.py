"""Requests: what an operator asks of a run, left in the lab book and settled by the run itself."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from daq.errors import DescriptionError
from daq.storage.feed import FEED, read_feed
from daq.storage.lab import runs
from daq.storage.lab_book import insert, select, update
from daq.storage.lock import is_written

WHAT = ("hold", "resume", "resume-at-bench", "end", "end-after-lap", "park", "acknowledge", "mute")


@dataclass(frozen=True, slots=True)
class Request:
    """Who asked what of a run, and when; `about`: which warning, how many minutes, or what else it needs."""

    number: int
    what: str
    who: str
    utc: str
    about: str = ""


def ask(lab: Path, run: str | None, what: str, who: str, about: str = "") -> tuple[int, str]:
    """Leave a request for a run (the one that goes on, when None); return its number and the run's name.

    Raises
    ------
    DescriptionError
        When there is no such run or request, or nobody carries the run out, so that nobody would hear it.
    """
    if what not in WHAT:
        raise DescriptionError((f"there is no request {what!r}. Known: {', '.join(WHAT)}.",))
    name = run or current_run(lab)
    known = {folder.name: folder for folder in runs(lab)}
    if name not in known:
        raise DescriptionError((f"lab {lab} has no run {name or 'yet'}. Start one first.",))
    if not is_written(known[name]):
        raise DescriptionError((f"run {name} is not going on: {_fate(known[name])} Nothing was asked.",))
    return insert(lab, "requests", run=name, what=what, who=who, utc=utc_now(), about=about), name


def current_run(lab: Path) -> str:
    """Return the name of the run that somebody carries out, else of the one written last; "" for none.

    The date in a folder's name will not do: a rehearsal carries that of its virtual clock.
    """
    written = sorted(((_written_ns(folder), folder) for folder in runs(lab)), key=lambda one: one[0])
    going = [folder.name for _, folder in written if is_written(folder)]
    return (going or [folder.name for _, folder in written] or [""])[-1]


def lapse(lab: Path, run: str, why: str) -> list[Request]:
    """Settle what was asked of a run while nobody carried it out, and return it."""
    stale = open_requests(lab, run)
    for request in stale:
        settle(lab, request, why)
    return stale


def _fate(folder: Path) -> str:
    feed = read_feed(folder) or {}
    if feed.get("ended"):
        return f"it has ended ({feed['ended']['reason']})."
    return "it was broken off; `tercet run --resume RUN` or the lab's service goes on with it."


def _written_ns(folder: Path) -> int:
    try:
        return (folder / FEED).stat().st_mtime_ns
    except OSError:
        return -1


def open_requests(lab: Path, run: str) -> list[Request]:
    """Return the requests of a run that nobody has settled, oldest first."""
    rows = select(lab, "requests", "run = ? AND settled_utc IS NULL", (run,))
    return [Request(row["id"], row["what"], row["who"], row["utc"], row["about"]) for row in rows]


def settle(lab: Path, request: Request, outcome: str) -> None:
    """Say what became of a request."""
    update(lab, "requests", request.number, settled_utc=utc_now(), outcome=outcome)


def utc_now() -> str:
    """Return the present UTC as text, to the second."""
    return datetime.now(UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
