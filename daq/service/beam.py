"""The beam: a shutter opened for a run that was started or armed, shut at its end; no safety function."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from daq.errors import DeviceError
from daq.ports import Clock, Devices

PATIENCE_S, LOOK_S = 10.0, 0.05


def let_in(devices: Devices, clock: Clock) -> None:
    """Let the beam pass, where the rig has a shutter, and wait until it says so.

    Raises
    ------
    DeviceError
        When it does not open.
    """
    shutter = devices.shutter
    if shutter is None:
        return
    shutter.armed = True
    shutter.unblock()
    until_ns = clock.now_ns() + round(PATIENCE_S * 1e9)
    while shutter.state() != "open":
        if clock.now_ns() > until_ns:
            what, remedy = f"the shutter has not opened in {PATIENCE_S:g} s", "Look at it, then resume"
            raise DeviceError(what, where=f"shutter {shutter.name}", remedy=remedy, kind="timeout")
        clock.sleep_until(clock.now_ns() + round(LOOK_S * 1e9))


def shut_out(devices: Devices) -> None:
    """Ask a shutter to block the beam, and arm it no longer; raises DeviceError."""
    if devices.shutter is not None:
        devices.shutter.block()
        devices.shutter.armed = False


@contextmanager
def shut_out_after(devices: Devices) -> Iterator[None]:
    """Give a block the beam; however it ends, Ctrl-C too, a shutter is asked to block it then."""
    try:
        yield
    finally:
        shut_out(devices)
