"""What has been asked of a run: by its terminal, and by operators through the lab book."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from daq.service.requests import Request


@dataclass(slots=True)
class Asked:
    """What is asked of a run while it is under way.

    `end` after this stand, `hold` before the next one, `stop` at once; a stop breaks in only while
    `interruptible`, that is while visits are performed. `requests` gives what operators left, `settled` tells
    them what became of it, `idle` waits a little on the wall clock while a run holds.
    """

    end: bool = False
    end_after_lap: bool = False
    hold: bool = False
    stop: bool = False
    interruptible: bool = False
    requests: Callable[[], Sequence[Request]] = tuple
    settled: Callable[[Request, str], None] = lambda request, outcome: None
    idle: Callable[[], None] = lambda: None


def hear(asked: Asked, utc: str) -> list[Request]:
    """Take in what operators have asked, oldest first, and return it."""
    heard = list(asked.requests())
    for request in heard:
        if request.what in ("hold", "resume"):
            asked.hold = request.what == "hold"
        elif request.what == "end-after-lap":
            asked.end_after_lap = True
        else:
            asked.end = True
        asked.settled(request, f"heard at {utc}")
    return heard
