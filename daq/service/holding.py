"""Holding: why a run waits, what clears it, and after how long it parks instead."""

from __future__ import annotations

import logging

from daq.errors import DeviceError, in_short, without_replies
from daq.ports import Device
from daq.reactions import TABLE, Action
from daq.records import Reading
from daq.sequencer import State
from daq.service.hearing import hear
from daq.service.night import Hold, Night, look, tell
from daq.service.parking import shield, unshield
from daq.service.room import HOLD_BYTES

log = logging.getLogger(__name__)

LOOK_AGAIN_S = 5.0
REOPEN_NS = 60 * 10**9
ON_THE_WALL = frozenset({"asked", "room"})  # these pass no time of a rehearsal


def hold(night: Night, cause: str, why: str, settle_s: float = 0.0) -> None:
    """Let the run hold for a cause, in the way that the table of reactions says."""
    if cause in night.holds:
        return
    entry = TABLE[cause]
    at_bench = entry.action is Action.HOLD_AT_BENCH
    night.holds[cause] = Hold(cause, why, night.clock.now_ns(), at_bench, entry.limit_s, settle_s)
    tell(night, "holding", text=why, cause=cause)
    if at_bench:
        shield(night)


def wait_out(night: Night) -> None:
    """Return when every hold is over, or when the end is asked for.

    Raises
    ------
    DeviceError
        When a hold has lasted longer than the table allows: the run parks and can be resumed.
    """
    told = set(night.holds) - {"asked"}
    shielded = any(one.at_bench for one in night.holds.values())
    while _held(night) and not night.asked.ends:
        for cause in set(night.holds) - told:
            tell(night, "holding", text=night.holds[cause].why, cause=cause)
            told.add(cause)
        night.become(State.HOLDING)
        look(night)
        night.live.write(night.state.value, night.running)
        pass_time(night)
        hear(night)
    if shielded and not night.asked.ends:
        unshield(night)


def pass_time(night: Night, until_ns: int | None = None) -> None:
    """Let a little time pass: on the wall for people, on the run clock for what heals by itself."""
    simulated = "room" in night.holds and night.bench is not None and night.bench.free_bytes() < HOLD_BYTES
    if until_ns is None and set(night.holds) <= ON_THE_WALL and not simulated:
        night.asked.idle()
    else:
        next_ns = night.clock.now_ns() + round(LOOK_AGAIN_S * 1e9)
        night.clock.sleep_until(next_ns if until_ns is None else min(next_ns, until_ns))
    night.alive()


def watch_limits(night: Night, reading: Reading) -> None:
    """Hold when a reading leaves the limits of the description: a sensor's, or the detector's load."""
    rate_hz = reading.values[0] / reading.live_s if reading.live_s > 0 else 0.0
    highest_hz = night.judge.rules.overload_hz
    if highest_hz is not None and rate_hz > highest_hz:
        hold(
            night,
            "overload",
            f"The detector counts {rate_hz:.3g} per second, and {highest_hz:.3g} are allowed.",
        )
    for name, (value, unit, _) in reading.sensors.items():
        limit = night.judge.rules.limits.get(name)
        if limit is None or limit.holds(value):
            continue
        cause = "interlock" if limit.interlock else "sensor"
        hold(
            night, cause, f"{name.replace('_', ' ')} is {value:.4g} {unit}, {limit.words()}.", limit.settle_s
        )


def _held(night: Night) -> bool:
    """Look at every hold again and return whether one is left; raises when one has lasted too long."""
    _room(night)
    _sensors(night)
    if night.until_utc_ns is not None and night.clock.utc_ns() > night.until_utc_ns:
        night.asked.end = True
    for one in night.holds.values():
        if night.clock.now_ns() - one.began_ns > one.limit_s * 1e9:
            raise DeviceError(f"{one.why} Nobody cleared it for {one.limit_s / 3600:g} h", kind="forbidden")
    return bool(night.holds)


def _room(night: Night) -> None:
    short = night.shortage()
    if not short:
        night.holds.pop("room", None)
        return
    night.holds.setdefault("room", Hold("room", short, night.clock.now_ns()))
    gone = night.exhausted()
    if gone and not night.asked.end:
        tell(night, "no room left", text=gone)
        night.asked.end = True


def _sensors(night: Night) -> None:
    """Let a hold for a sensor go when every limited quantity has been good for long enough."""
    one = night.holds.get("sensor")
    if one is None:
        return
    now_ns = night.clock.now_ns()
    if not _all_good(night):
        one.good_ns = None
    elif one.good_ns is None:
        one.good_ns = now_ns
    if one.good_ns is not None and now_ns - one.good_ns >= one.settle_s * 1e9:
        del night.holds["sensor"]


def _all_good(night: Night) -> bool:
    limits = night.judge.rules.limits
    for sensor in night.devices.sensors:
        if not any(name.startswith(f"{sensor.name}_") for name in limits):
            continue
        try:
            read = {f"{sensor.name}_{key}": value for key, (value, _) in sensor.read().items()}
        except DeviceError:
            reopen(sensor)
            return False
        if not all(limit.holds(read[name]) for name, limit in limits.items() if name in read):
            return False
    return True


def reopen(device: Device) -> None:
    """Close and open a device anew; one that stays away is tried again later."""
    device.close()
    try:
        device.open()
    except DeviceError as error:
        log.warning("%s It is tried again.", in_short(without_replies(error)))


def reopen_silent(night: Night, reading: Reading) -> None:
    """Open sensors anew that have not answered, at most once a minute: counts do not wait for them long."""
    now_ns = night.clock.now_ns()
    for sensor in night.devices.sensors:
        silent = not any(name.startswith(f"{sensor.name}_") for name in reading.sensors)
        if silent and now_ns - night.reopened_ns.get(sensor.name, -REOPEN_NS) >= REOPEN_NS:
            night.reopened_ns[sensor.name] = now_ns
            reopen(sensor)
