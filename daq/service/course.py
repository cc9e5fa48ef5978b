"""The course of a night: visits performed, faults reacted to, every reading archived, watched and told."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from daq.errors import DeviceError, StorageError, in_short, without_replies
from daq.estimate.stopping import END_TIME, PLANNED
from daq.itinerary import Itinerary
from daq.reactions import Action, reaction
from daq.records import Quality, Reading
from daq.sequencer import State, axis_trouble, perform
from daq.service.ending import REASONS, due_now
from daq.service.groups import AFTER_FAULT, BY_RULE, Place, repeat_from, supply
from daq.service.hearing import hear
from daq.service.holding import hold, pass_time, reopen, reopen_silent, wait_out, watch_limits
from daq.service.night import AT_REQUEST, COMPLETE, Night, Trouble, look, look_after, tell
from daq.service.parking import keep_bench
from daq.service.readying import make_ready

REPEATED = Quality.OFF_TARGET | Quality.MOVED | Quality.OVERFLOW | Quality.DISPERSION | Quality.FINGERPRINT
REPEATED_SHARE = 0.1  # of the stands so far; above it a repeat is no cure
ASTRAY_STANDS = 6
DARK_STANDS = 2
RESTARTS_AN_HOUR = 3


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
    if night.live.watcher.restarts >= RESTARTS_AN_HOUR:
        night.asked.end_after_lap = True
    while not night.asked.ends and place.number < len(night.itinerary):
        place = _stretch(night, place)
        wait_out(night)
    night.become(State.PARKING)
    if place.number == len(night.itinerary):
        night.asked.kind = PLANNED
        return COMPLETE
    return REASONS.get(night.asked.kind, AT_REQUEST)


def _stretch(night: Night, place: Place) -> Place:
    """Perform visits until the plan is done or something comes between; return where to go on."""
    last: Reading | None = None
    try:
        if not make_ready(night):
            return place
        for reading in _readings(night, place):
            last = reading
            if _comes_between(night, reading):
                break
    except DeviceError as error:
        found = _trouble_of(night, error)
        react(night, found)
    except StorageError as error:
        if not night.shortage():
            raise
        tell(night, "not stored", text=str(error))
    if last is not None and _measure_again(night, last):
        night.sat_out += 1
        return repeat_from(night.itinerary, last.visit, last.attempt, BY_RULE)
    return place_after(night.itinerary, place, last)


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
        _took(night, reading)
        yield reading


def _took(night: Night, reading: Reading) -> None:
    """Take in a reading that is durable: tell it, estimate with it, do what is due at the end of a stand."""
    if night.judge.finding:
        tell(night, "left out", text=night.judge.finding)
    for note in night.judge.notes:
        tell(night, "noticed", text=note)
    night.running.add(reading)
    night.counted_ns = reading.gate_close_ns
    closed = night.live.took(reading, night.judge.odd)
    night.trouble = Trouble()
    if closed and not night.live.watcher.dark_stands:
        night.darkness = Trouble()
    if closed:
        _stood(night, reading)
    night.on_visit(reading)
    night.alive()
    night.live.write(night.state.value, night.running)


def _stood(night: Night, reading: Reading) -> None:
    """Do what is due at the end of a stand."""
    following = reading.visit + 1
    look_after(night, reading.visit)
    keep_bench(night)
    reopen_silent(night, reading)
    pause_s = night.itinerary.pauses.get(following, 0.0)
    if pause_s:
        text = f"A pause of {pause_s:.0f} s before the next pair, as planned."
        tell(night, "pause", text=text, visit=following)


def _comes_between(night: Night, reading: Reading) -> bool:
    """Return whether the visits have to be broken off after a reading: a hold, or a stand to be repeated."""
    watch_limits(night, reading)
    if night.judge.labels:
        hold(night, "labels", night.judge.labels)
        night.judge.labels = ""
    astray = bool(reading.quality & (Quality.OFF_TARGET | Quality.MOVED))
    if night.itinerary.ends_stand(reading.visit):
        night.astray = night.astray + 1 if astray else 0
        if night.astray >= ASTRAY_STANDS:
            night.astray = 0
            hold(night, "reference", f"An axis is away from its target in {ASTRAY_STANDS} stands in a row.")
        watcher = night.live.watcher
        if watcher.remedy_left and watcher.wrong_opening and watcher.dark_stands == 0:
            night.suspect = watcher.wrong_opening
            return True
        if watcher.dark_stands >= DARK_STANDS:
            why = f"No light in {watcher.dark_stands} stands in a row"
            react(night, DeviceError(why, kind="no counts"))
            return True
    held = any(cause != "asked" for cause in night.holds)
    return held or _measure_again(night, reading)


def _measure_again(night: Night, last: Reading) -> bool:
    """Return whether the stand that a reading ends is measured again: once, when a rule speaks."""
    if night.itinerary.visits_per_stand != night.judge.whole_stand or night.asked.ends:
        return False  # in blocked order a stand cannot be repeated on its own
    if not night.itinerary.ends_stand(last.visit) or last.attempt > 1:
        return False
    return (
        bool(night.judge.stand_quality & REPEATED) and night.sat_out <= 5 + REPEATED_SHARE * night.live.stands
    )


def _may_go_on(night: Night, number: int) -> bool:
    """Return whether a stand may begin; asked while the gate before it is open, so nothing waits here."""
    hear(night)
    until_ns = night.until_utc_ns
    if until_ns is not None and night.clock.utc_ns() + _stand_ns(night, number) > until_ns:
        _end_for(night, END_TIME)
    elif _begins_pair(night.itinerary, number) and not night.asked.ends:
        _end_for(night, due_now(night.running, night.stopping, int(night.itinerary.pair[number])))
    if night.asked.end_after_lap and night.itinerary.begins_lap(number):
        night.asked.end = True
    return not (night.asked.ends or night.holds or night.shortage())


def _end_for(night: Night, kind: str) -> None:
    """Ask for the end that is due, if one is; what a person asked before stays theirs."""
    if kind:
        night.asked.end, night.asked.kind = True, night.asked.kind or kind


def _patient(night: Night) -> bool:
    """Return whether a pause may go on; asked every second of it."""
    hear(night)
    night.alive()
    return not (night.asked.ends or night.asked.end_after_lap or night.holds)


def _stand_ns(night: Night, number: int) -> int:
    """Return how long the stand that a visit begins will take, and what is left of the one before."""
    plan = night.itinerary
    within = np.flatnonzero(plan.stand == plan.stand[number])
    took_s = plan.start_s[within[-1]] + plan.dwell_s[within[-1]] - plan.start_s[number]
    return round(1e9 * float(took_s + plan.dwell_s[number]))


def _begins_pair(itinerary: Itinerary, number: int) -> bool:
    return number > 0 and bool(itinerary.pair[number] != itinerary.pair[number - 1])


def place_after(itinerary: Itinerary, place: Place, last: Reading | None) -> Place:
    """Return where to go on: a stand that was broken off is repeated whole, as another attempt."""
    if last is None:
        return place
    if itinerary.ends_stand(last.visit):
        return Place(last.visit + 1)
    return repeat_from(itinerary, last.visit, last.attempt, AFTER_FAULT)


def _trouble_of(night: Night, error: DeviceError) -> DeviceError:
    """Return what is behind a refusal: an alarm or a lost reference, where an axis says so."""
    if error.kind != "refused":
        return error
    try:
        for stage in night.devices.stages:
            found = axis_trouble(stage.name, stage.state())
            if found is not None:
                return found
    except DeviceError as another:
        return another
    return error


def react(night: Night, error: DeviceError) -> None:
    """Do about a fault what the table says; raises it when that is to park."""
    error = without_replies(error) if night.blinding.hides else error
    trouble = night.darkness if error.kind == "no counts" else night.trouble
    now_ns = night.clock.now_ns()
    if not trouble.tries:
        trouble.began_ns = now_ns
    tell(night, "fault", text=in_short(error), kind=error.kind)
    elapsed_s = (now_ns - trouble.began_ns) / 1e9
    action, wait_s = reaction(error.kind, trouble.tries, elapsed_s)
    if action is Action.PARK:
        night.become(State.PARKING)
        raise error
    if action is Action.HOLD_AT_BENCH:
        hold(night, error.kind, in_short(error))
        return
    trouble.tries, trouble.why = trouble.tries + 1, in_short(error)
    _recover(night, action, wait_s)


def _recover(night: Night, action: Action, wait_s: float) -> None:
    """Wait, and open the links again when the fault asks for it; a failure shows at the next try."""
    night.become(State.HOLDING)
    look(night)
    night.live.write(night.state.value, night.running, now=True)
    until_ns = night.clock.now_ns() + round(wait_s * 1e9)
    while night.clock.now_ns() < until_ns and not night.asked.ends:
        pass_time(night, until_ns)
        hear(night)
    if action is not Action.RECONNECT:
        return
    for device in night.devices.all:
        reopen(device)
