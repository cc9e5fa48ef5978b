"""Requests: what an operator asks of a run, left in the lab book and settled by the run itself."""

from __future__ import annotations

from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

from daq.errors import DescriptionError
from daq.storage.lab import runs
from daq.storage.lab_book import insert, select, update

WHAT = ("hold", "resume", "end", "end-after-lap", "park")


@dataclass(frozen=True, slots=True)
class Request:
    """Who asked what of a run, and when."""

    number: int
    what: str
    who: str
    utc: str


def ask(lab: Path, run: str | None, what: str, who: str) -> tuple[int, str]:
    """Leave a request for a run (the newest of the lab when None); return its number and the run's name.

    Raises
    ------
    DescriptionError
        When the lab has no run to ask it of, or the request is unknown.
    """
    if what not in WHAT:
        raise DescriptionError((f"there is no request {what!r}. Known: {', '.join(WHAT)}.",))
    known = [folder.name for folder in runs(lab)]
    name = run or (known[-1] if known else "")
    if name not in known:
        raise DescriptionError((f"lab {lab} has no run {name or 'yet'}. Start one first.",))
    return insert(lab, "requests", run=name, what=what, who=who, utc=utc_now()), name


def open_requests(lab: Path, run: str) -> list[Request]:
    """Return the requests of a run that nobody has settled, oldest first."""
    rows = select(lab, "requests", "run = ? AND settled_utc IS NULL", (run,))
    return [Request(row["id"], row["what"], row["who"], row["utc"]) for row in rows]


def settle(lab: Path, request: Request, outcome: str) -> None:
    """Say what became of a request."""
    update(lab, "requests", request.number, settled_utc=utc_now(), outcome=outcome)


def utc_now() -> str:
    """Return the present UTC as text, to the second."""
    return datetime.now(UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
