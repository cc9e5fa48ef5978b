"""Readying: after a long wait two windows and the dark are looked at before a run goes on.

The same where an opening does not fit: the mask finds its reference again first, once in a run.
"""

from __future__ import annotations

from daq.errors import DaqError, DeviceError, StorageError, in_short
from daq.sequencer import State
from daq.service.beam import let_in
from daq.service.holding import hold
from daq.service.night import Night, tell
from daq.tasks.contract import Taken
from daq.tasks.moves import FreeMask, mask_stage, taken
from daq.tasks.ready import Readiness, readiness, ready_visits
from daq.tasks.turns import by_nobody

QUIET_S = 600.0  # without a count: beyond, things may have crept


def make_ready(night: Night) -> bool:
    """Measure what has to be after a long wait or a doubt of the mask; return whether the run may go on.

    A window that is off its place holds the run for a person at the bench, and is measured again after that.

    Raises
    ------
    DeviceError, StorageError
        As in any visit of the run.
    """
    if night.suspect and not _found_again(night):
        return False
    quiet_s = 0.0 if night.counted_ns is None else (night.clock.now_ns() - night.counted_ns) / 1e9
    if night.records is None or not (night.unready or quiet_s > QUIET_S):
        return True
    night.unready = True
    night.become(State.MOVING)
    try:
        found = _measured(night)
    except (DeviceError, StorageError):
        raise
    except DaqError as error:
        hold(night, "overload", str(error))
        return False
    let_in(night.devices, night.clock)
    night.counted_ns = night.clock.now_ns()
    when = f"After {quiet_s / 60:.0f} min without a count" if quiet_s > QUIET_S else "Before the run goes on"
    tell(night, "ready", text=f"{when}: {found.said}")
    return _is_in_order(night, found)


def _is_in_order(night: Night, found: Readiness) -> bool:
    """Return whether the run may go on with what was found; a mask off its place holds it."""
    if found.bright:
        tell(night, "noticed", text=found.bright)
    if found.astray:
        hold(night, "flank", found.astray)
        return False
    night.unready = False
    return True


def _found_again(night: Night) -> bool:
    """Let the mask find its reference again; one that cannot waits for a person at the bench."""
    name, night.suspect = night.suspect, ""
    night.live.watcher.use_remedy()
    why = f"Opening {name} does not fit what it counted before: half covered, or off its place."
    tell(night, "reference", text=f"{why} The mask finds its reference again.")
    night.become(State.MOVING)
    try:
        mask_stage(night.devices, night.devices.mask).home()
    except DeviceError as error:
        hold(night, "flank", f"{why} The mask did not find its reference: {in_short(error)}")
        return False
    night.unready = True
    return True


def _measured(night: Night) -> Readiness:
    records, devices = night.records or {}, night.devices
    stage = mask_stage(devices, devices.mask)
    place_mm = devices.detector.state().position_mm
    asks = ready_visits(records, stage.limits_mm, place_mm, devices.shutter is not None)
    mask = FreeMask(devices.mask, stage, 0.0)
    done: list[Taken] = []
    for one in taken(asks, devices, mask, night.archive, night.clock, None, by_nobody, night.judge.rules):
        done.append(one)
        night.alive()
    return readiness(records, done)
