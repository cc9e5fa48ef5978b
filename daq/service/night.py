"""A night: everything that one run holds while it is under way, and telling what happens in it."""

from __future__ import annotations

import logging
from collections.abc import Callable, Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from daq.errors import StorageError
from daq.estimate import Blinding, Judge, Running
from daq.estimate.standing import Change
from daq.estimate.stopping import Stopping
from daq.estimate.wake import Held
from daq.itinerary import Itinerary
from daq.ports import Bench, Clock, Devices
from daq.records import Reading
from daq.sequencer import State, step
from daq.service.asked import Asked
from daq.service.live import Live, stamp
from daq.storage.log import RunLog
from daq.storage.run import Archive

log = logging.getLogger(__name__)

COMPLETE, AT_REQUEST, STOPPED = "complete", "ended at request after a stand", "stopped at request"
WITH_PROGRAM = "stopped with the program"  # by the computer: the service goes on with such a run by itself


@dataclass(slots=True)
class Hold:
    """Why a run holds: `limit_s` until it parks, `settle_s` for which a good sensor has to stay good."""

    cause: str
    why: str
    began_ns: int
    at_bench: bool = False
    limit_s: float = float("inf")
    settle_s: float = 0.0
    good_ns: int | None = None


@dataclass(slots=True)
class Trouble:
    """What has gone wrong since the last good visit: since when (the first fault), and how often tried."""

    began_ns: int = 0
    tries: int = 0
    why: str = ""


@dataclass(slots=True)
class Night:
    """Everything one run holds while it is under way."""

    folder: Path
    itinerary: Itinerary
    archive: Archive
    clock: Clock
    devices: Devices
    running: Running
    judge: Judge
    live: Live
    log: RunLog
    asked: Asked
    bench: Bench | None = None
    state: State = State.READY
    on_visit: Callable[[Reading], None] = field(default=lambda reading: None)
    on_warning: Callable[[Change], None] = field(default=lambda change: None)
    alive: Callable[[], None] = field(default=lambda: None)  # called after every visit and bounded wait
    shortage: Callable[[], str] = lambda: ""  # a sentence while there is too little room on the disk
    exhausted: Callable[[], str] = lambda: ""  # a sentence when there is next to none
    until_utc_ns: int | None = None
    stopping: Stopping = field(default_factory=Stopping)
    blinding: Blinding = field(default_factory=Blinding)
    holds: dict[str, Hold] = field(default_factory=dict)
    trouble: Trouble = field(default_factory=Trouble)  # with a device
    darkness: Trouble = field(default_factory=Trouble)  # no light, though every device answers
    reopened_ns: dict[str, int] = field(default_factory=dict)  # by sensor: when it was last opened anew
    sat_out: int = 0  # stands that were measured again because of a rule
    records: Mapping[str, Any] | None = None  # of the bench; without them nothing is looked at after a wait
    counted_ns: int | None = None  # when the last gate closed
    suspect: str = ""  # the opening for whose sake the mask has to find its reference again
    unready: bool = False  # what has to be looked at after a long wait was not, or was not in order
    astray: int = 0  # stands in a row in which an axis was not where it should be

    def become(self, state: State) -> None:
        """Take a step of the table of states."""
        if state is not self.state:
            self.state = step(self.state, state)


def tell(night: Night, event: str, **fields: Any) -> None:
    """Say what happened, in the run's log, on the page and in the program's log."""
    now = {"utc": stamp(night.clock.utc_ns()), "run_ns": night.clock.now_ns()}
    try:
        night.log.append(event, **now, **fields)
    except StorageError as error:
        log.error("%s", error)
    night.live.say(fields.get("text") or _sentence(event, fields))
    log.info("%s %s", event, fields)


def look(night: Night, ended: str = "", *, anew: bool = False, over: bool = False) -> None:
    """Look at every condition again; what has changed goes to the log and to whoever wants to know."""
    for change in night.live.look(night.running, held(night), ended, anew=anew, over=over):
        one = change.warning
        verb = {"raised": "warning", "worse": "warning worse", "cleared": "warning cleared"}[change.became]
        text = one.says.what if change.became != "cleared" else f"No longer: {one.says.what}"
        tell(night, verb, id=one.name, text=text, wakes=one.says.wakes, in_doubt=one.says.in_doubt)
        night.on_warning(change)


def look_after(night: Night, visit: int) -> None:
    """Look at every condition after a stand; at the end of a lap, when that is due, at a new estimate."""
    following = visit + 1
    last = following == len(night.itinerary)
    look(night, anew=last or (night.live.due and night.itinerary.begins_lap(following)))


def held(night: Night) -> Held | None:
    """Return why the run holds, the gravest cause first; None while it does not."""
    now_ns = night.clock.now_ns()
    grave = sorted(night.holds.values(), key=lambda hold: (not hold.at_bench, hold.cause == "asked"))
    if grave:
        first = grave[0]
        return Held(first.cause, first.why, (now_ns - first.began_ns) / 3.6e12, at_bench=first.at_bench)
    for cause, trouble in (("fault", night.trouble), ("no counts", night.darkness)):
        if trouble.tries:
            return Held(cause, trouble.why, (now_ns - trouble.began_ns) / 3.6e12, trouble.tries)
    return None


def _sentence(event: str, fields: dict[str, Any]) -> str:
    text = event[:1].upper() + event[1:]
    if "visit" in fields:
        return f"{text} at visit {fields['visit']}."
    if "who" in fields:
        return f"{text} by {fields['who']}."
    return f"{text}: {fields['reason']}." if "reason" in fields else f"{text}."
