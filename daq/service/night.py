"""A night: visits performed, faults reacted to, every reading archived, watched and told."""

from __future__ import annotations

import logging
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np

from daq.errors import DeviceError, StorageError
from daq.estimate import Judge, Running
from daq.itinerary import Itinerary
from daq.openings import NONE, mask
from daq.ports import Bench, Clock, Devices
from daq.reactions import Action, reaction
from daq.records import Reading
from daq.sequencer import State, perform, step
from daq.service.asked import Asked, hear
from daq.service.groups import AFTER_FAULT, Place, repeat_from, supply
from daq.service.live import Live, stamp
from daq.storage.log import RunLog
from daq.storage.run import Archive

log = logging.getLogger(__name__)

COMPLETE, AT_REQUEST, STOPPED = "complete", "ended at request after a stand", "stopped at request"


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
    shortage: Callable[[], str] = lambda: ""  # a sentence while there is too little room on the disk
    until_utc_ns: int | None = None

    def become(self, state: State) -> None:
        """Take a step of the table of states."""
        if state is not self.state:
            self.state = step(self.state, state)


def carry_out(night: Night, place: Place) -> str:
    """Perform a run from a place to its end and return how it ended.

    Raises
    ------
    DeviceError
        When a fault could not be cured within the limits of the table; the run can be resumed.
    StorageError
        When a reading could not be stored; all before it are safe.
    """
    tell(night, "run goes on" if place.number else "run begins", visit=place.number)
    tries, good_ns = 0, night.clock.now_ns()
    while True:
        last: Reading | None = None
        try:
            for reading in _readings(night, place):
                last, tries, good_ns = reading, 0, night.clock.now_ns()
        except DeviceError as error:
            action, wait_s = _reaction(night, error, tries, good_ns)
            place = _place_after(night, place, last)
            tries += 1
            _recover(night, action, wait_s)
            continue
        except StorageError as error:
            if not night.shortage():
                raise
            tell(night, "not stored", text=str(error))
        place = _place_after(night, place, last)
        if night.asked.end or place.number == len(night.itinerary):
            break
        _hold(night)
    night.become(State.PARKING)
    return COMPLETE if place.number == len(night.itinerary) else AT_REQUEST


def _reaction(night: Night, error: DeviceError, tries: int, good_ns: int) -> tuple[Action, float]:
    """Return what to do about a fault and how long to wait before; raises it when that is to park."""
    tell(night, "fault", text=str(error), kind=error.kind)
    action, wait_s = reaction(error.kind, tries, (night.clock.now_ns() - good_ns) / 1e9)
    if action is Action.PARK:
        night.become(State.PARKING)
        raise error
    return action, wait_s


def _readings(night: Night, place: Place) -> Iterator[Reading]:
    visits = supply(night.itinerary, place, lambda number: _may_go_on(night, number))
    performed = perform(
        visits,
        night.devices,
        night.archive,
        night.clock,
        night.become,
        night.judge.judge,
        lambda: _patient(night),
    )
    for _, reading in performed:
        if night.judge.finding:
            tell(night, "left out", text=night.judge.finding)
        night.running.add(reading)
        night.live.took(reading)
        night.on_visit(reading)
        if _ends_stand(night.itinerary, reading.visit):
            _keep_bench(night)
            _tell_pause(night, reading.visit + 1)
        night.live.write(night.state.value, night.running)
        yield reading


def _may_go_on(night: Night, number: int) -> bool:
    """Return whether a stand may begin; asked while the gate before it is open, so nothing waits here."""
    _hear(night)
    if (
        night.until_utc_ns is not None
        and night.clock.utc_ns() + _stand_ns(night, number) > night.until_utc_ns
    ):
        night.asked.end = True
    if night.asked.end_after_lap and _begins_lap(night.itinerary, number):
        night.asked.end = True
    return not (night.asked.end or night.asked.hold or night.shortage())


def _patient(night: Night) -> bool:
    """Return whether a pause may go on; asked every second of it."""
    _hear(night)
    return not (night.asked.end or night.asked.end_after_lap or night.asked.hold)


def _tell_pause(night: Night, number: int) -> None:
    pause_s = night.itinerary.pauses.get(number, 0.0)
    if pause_s:
        tell(
            night, "pause", text=f"A pause of {pause_s:.0f} s before the next pair, as planned.", visit=number
        )


def _stand_ns(night: Night, number: int) -> int:
    """Return how long the stand that a visit begins will take, and what is left of the one before."""
    plan = night.itinerary
    within = np.flatnonzero(plan.stand == plan.stand[number])
    took_s = plan.start_s[within[-1]] + plan.dwell_s[within[-1]] - plan.start_s[number]
    return round(1e9 * float(took_s + plan.dwell_s[number]))


def _hold(night: Night) -> None:
    """Return when the hold is over, whoever or whatever asked for it, or when the end is asked for."""
    short = night.shortage()
    tell(night, "holding", **({"text": short} if short else {}))
    while (night.asked.hold or night.shortage()) and not night.asked.end:
        night.become(State.HOLDING)
        night.live.write(night.state.value, night.running)
        night.asked.idle()
        _hear(night)


def _begins_lap(itinerary: Itinerary, number: int) -> bool:
    return number == 0 or bool(itinerary.lap[number] != itinerary.lap[number - 1])


def _hear(night: Night) -> None:
    for request in hear(night.asked, stamp(night.clock.utc_ns())):
        tell(night, f"{request.what} asked", who=request.who)


def _ends_stand(itinerary: Itinerary, number: int) -> bool:
    last = number + 1 == len(itinerary)
    return last or itinerary.stand[number + 1] != itinerary.stand[number]


def _place_after(night: Night, place: Place, last: Reading | None) -> Place:
    """Return where to go on: a stand that was broken off is repeated whole, as another attempt."""
    if last is None:
        return place
    if _ends_stand(night.itinerary, last.visit):
        return Place(last.visit + 1)
    return repeat_from(night.itinerary, last.visit, last.attempt, AFTER_FAULT)


def _recover(night: Night, action: Action, wait_s: float) -> None:
    """Wait, and open the links again when the fault asks for it; a failure shows at the next try."""
    night.become(State.HOLDING)
    night.live.write(night.state.value, night.running, now=True)
    night.clock.sleep_until(night.clock.now_ns() + round(wait_s * 1e9))
    if action is not Action.RECONNECT:
        return
    for device in night.devices.all:
        device.close()
        try:
            device.open()
        except DeviceError as error:
            log.warning("%s", error)


def park(night: Night) -> None:
    """Show no slit and let the detector rest; a device that does not answer is only told of."""
    if night.state is not State.ENDED:
        night.state = State.PARKING
    try:
        predicted_s = night.devices.mask.show(mask(NONE))
        night.clock.sleep_until(night.clock.now_ns() + round(predicted_s * 1e9))
    except DeviceError as error:
        tell(night, "could not park", text=str(error))


def stop_now(night: Night) -> None:
    """Ask every axis to stop and the counter to forget its gate: requests over data links, no more."""
    for act in (night.devices.mask.stop_now, night.devices.detector.stop_now, night.devices.counter.abort):
        try:
            act()
        except DeviceError as error:
            log.warning("%s", error)


def _keep_bench(night: Night) -> None:
    if night.bench is not None:
        keep_beside(night.folder, night.bench.keep())


BENCH_FILE = "bench.json"


def keep_beside(folder: Path, state: bytes) -> None:
    """Replace the side file of a simulated bench."""
    fresh = folder / (BENCH_FILE + ".new")
    try:
        fresh.write_bytes(state)
        fresh.replace(folder / BENCH_FILE)
    except OSError as error:
        log.error("the simulated bench's place could not be kept: %s", error)


def tell(night: Night, event: str, **fields: Any) -> None:
    """Say what happened, in the run's log, on the page and in the program's log."""
    now = {"utc": stamp(night.clock.utc_ns()), "run_ns": night.clock.now_ns()}
    try:
        night.log.append(event, **now, **fields)
    except StorageError as error:
        log.error("%s", error)
    night.live.say(fields.get("text") or _sentence(event, fields))
    log.info("%s %s", event, fields)


def _sentence(event: str, fields: dict[str, Any]) -> str:
    text = event[:1].upper() + event[1:]
    if "visit" in fields:
        return f"{text} at visit {fields['visit']}."
    if "who" in fields:
        return f"{text} by {fields['who']}."
    return f"{text}: {fields['reason']}." if "reason" in fields else f"{text}."
