"""Through: a night is carried out, and its archive finished or left to be gone on with."""

from __future__ import annotations

import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from daq.errors import DaqError
from daq.estimate.stopping import BROKEN
from daq.sequencer import State
from daq.service.asked import Asked
from daq.service.beam import let_in
from daq.service.ending import how_it_ended
from daq.service.equip import Wanted
from daq.service.live import stamp
from daq.service.night import AT_REQUEST, COMPLETE, STOPPED, WITH_PROGRAM, Night, look, tell
from daq.service.parking import park, stop_now
from daq.service.requests import open_requests, settle
from daq.storage.digest import digest, gate_digest
from daq.storage.reader import open_visits

HOLD_POLL_S = 0.2


def through(night: Night, wanted: Wanted, course: Callable[[Night], str]) -> str:
    """Carry a night out; the archive is finished when it ends in good order, else left to be resumed."""
    _listen(night.asked, night.folder)
    wanted.on_start(night.folder, night.itinerary)
    night.live.write(night.state.value, night.running, now=True)
    try:
        ended = _interruptibly(night, course)
    except KeyboardInterrupt:
        stop_now(night)
        ended = WITH_PROGRAM if night.asked.by_system else STOPPED
    except DaqError as error:
        night.asked.kind = BROKEN
        _end(night, str(error))
        raise
    _end(night, ended)
    if ended not in (STOPPED, WITH_PROGRAM):
        night.archive.finish(_results(night, ended))
        if not wanted.transport:
            _report(night)
    return ended


def _report(night: Night) -> None:
    """Write the morning report beside a run; a report that fails costs the run nothing."""
    from daq.service.morning import write_report  # pictures take a second to import

    try:
        write_report(night.folder)
    except DaqError as error:
        tell(night, "no report", text=f"The morning report was not written: {error}")


def _listen(asked: Asked, folder: Path) -> None:
    """Let a run hear what operators leave for it in the book of its lab."""
    lab = folder.parents[1]
    asked.requests = lambda: open_requests(lab, folder.name)
    asked.settled = lambda request, outcome: settle(lab, request, outcome)
    asked.idle = lambda: time.sleep(HOLD_POLL_S)


def _results(night: Night, ended: str) -> dict[str, Any]:
    """Return what a finished archive says of its outcome: derived, and checked again by `tercet verify`."""
    visits = open_visits(night.folder)
    figures = night.running.estimate().to_json()
    return {
        "ended": ended,
        "ended_utc": stamp(night.clock.utc_ns()),
        "stop": {"reason": ended, **how_it_ended(night)},
        "results": {name: value for name, value in figures.items() if not isinstance(value, list)}
        | {"blinding": night.blinding.state},
        "digest": digest(visits),
        "gate_digest": gate_digest(visits),
    }


def _interruptibly(night: Night, course: Callable[[Night], str]) -> str:
    """Carry a night out; a stop may break in here, but not while an archive is opened or finished."""
    night.asked.interruptible = True
    try:
        if night.asked.stop:
            raise KeyboardInterrupt
        let_in(night.devices, night.clock)
        return course(night)
    finally:
        night.asked.interruptible = False


def _end(night: Night, reason: str) -> None:
    park(night)
    night.become(State.ENDED)
    night.holds.clear()
    tell(night, "ended", reason=reason, **how_it_ended(night))
    asked_for = reason in (COMPLETE, AT_REQUEST, STOPPED, WITH_PROGRAM)
    look(night, "" if asked_for else reason, anew=True, over=True)
    night.live.write(night.state.value, night.running, reason, now=True)
