"""At the bench: the devices of a rig in the hands of a person who is there, on the real clock."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

from daq.description import Rig
from daq.devices.clock import RealClock
from daq.devices.registry import open_devices
from daq.errors import DaqError, DeviceError
from daq.ports import Clock, Devices
from daq.service.beam import shut_out

PRESENT = "here"
ASKED = (
    "You stand at the bench, see what moves, and can stop it without this program; no hands are near it.",
    "Stop and shutter here are requests over data links; they are no emergency stop and no interlock.",
    "Local safety rules and the instructions of the makers of your equipment hold.",
)


def refuse_absent(rig: Rig, typed: Callable[[str], str]) -> None:
    """Refuse to go on unless a person says that somebody is at the bench; simulated devices hurt nobody.

    Raises
    ------
    DaqError
        When anything else was typed.
    """
    if rig.simulated:
        return
    question = "\n".join((*ASKED, f"Type {PRESENT!r} if all of it is so: "))
    if typed(question).strip() != PRESENT:
        raise DaqError("nobody has said to be at the bench; nothing was opened", where=f"rig {rig.name}")


@contextmanager
def in_hand(rig: Rig) -> Iterator[tuple[Devices, Clock]]:
    """Give the devices of a rig, opened; when they are let go, a shutter is asked to block the beam.

    Raises
    ------
    DeviceError
        When a device does not answer, or another program has it.
    """
    clock = RealClock()
    try:
        opened = open_devices(rig, clock)
        with opened as devices:
            yield devices, clock
            shut_out(devices)
    except DeviceError as error:
        if rig.simulated and error.kind == "lost":
            remedy = "Serve the simulated instruments first: `python -m simulators RIG`"
            raise DeviceError(error.what, where=error.where, remedy=remedy, kind="lost") from error
        raise
