"""At the bench: the devices of a rig in the hands of a person who is there, on the real clock."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import replace
from math import isfinite

from daq.description import Rig
from daq.devices.clock import RealClock
from daq.devices.registry import open_devices
from daq.errors import DaqError, DeviceError
from daq.ports import Clock, Devices
from daq.service.beam import shut_out_after
from daq.tasks.contract import Turn

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


def turned(typed: Callable[[str], str], said: Callable[[str], None], turn: Turn) -> Turn:
    """Have a person do what only a person may do, and return it with what they say is shown then.

    Raises
    ------
    DaqError
        When nobody answers.
    """
    said("\n".join(filter(None, (turn.caution, turn.text))))
    while True:
        line = typed("Press Enter when it is done, or type the value that is shown there: ")
        if not line:
            remedy = "Set back what was turned, then repeat the task with somebody there"
            raise DaqError("nobody has done it", where="at the bench", remedy=remedy)
        if not line.strip():
            return turn
        with suppress(ValueError):
            if isfinite(float(line)):
                return replace(turn, shown=float(line))
        said(f"{line.strip()!r} is no number.")


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
        with opened as devices, shut_out_after(devices):
            yield devices, clock
    except DeviceError as error:
        if rig.simulated and error.kind == "lost":
            remedy = "Serve the simulated instruments first: `python -m simulators RIG`"
            raise DeviceError(error.what, where=error.where, remedy=remedy, kind="lost") from error
        raise
