"""Sensor: the room's temperature and pressure over SCPI."""

from __future__ import annotations

import math
from collections.abc import Mapping

from daq.description.device import DeviceEntry
from daq.description.rig import Rig
from daq.devices.links import Link
from daq.devices.wire import Wire
from daq.ports import Clock

NOT_A_NUMBER = 9.91e37  # SCPI-1999, vol. 1, sect. 7.2.1

_NUMBER = r"[+-]?\d+(?:\.\d+)?(?:[eE][+-]?\d+)?"


class ScpiSensor:
    """A sensor for temperature [K] and pressure [Pa]; what it cannot measure is NaN.

    Parameters
    ----------
    name
        The device in the rig.
    entry
        Its address, and how often it is asked.
    clock
        The run clock.
    """

    port = "sensor"

    def __init__(self, name: str, entry: DeviceEntry, clock: Clock) -> None:
        self.name, self.every_s = name, entry.every_s
        self._link = Link(clock, entry.address, Wire(timeout_s=entry.timeout_s), name)

    @classmethod
    def of_rig(cls, name: str, rig: Rig, clock: Clock) -> tuple[ScpiSensor, ...]:
        """Return the sensor of a rig."""
        return (cls(name, rig.devices[name], clock),)

    def open(self) -> None:
        """Open the link and ask the identity."""
        self._link.open()

    def close(self) -> None:
        """Let the link go; never raises."""
        self._link.close()

    def identity(self) -> str:
        """Return the identity reply, verbatim."""
        return self._link.identity

    def read(self) -> Mapping[str, tuple[float, str]]:
        """Return name -> (value, unit)."""
        expect = f"(?P<temperature>{_NUMBER});(?P<pressure>{_NUMBER})"
        reply = self._link.ask(":MEAS:TEMP?;:MEAS:PRESSURE?", expect, safe_to_repeat=True)
        return {
            "temperature": (measured(reply["temperature"]), "K"),
            "pressure": (measured(reply["pressure"]), "Pa"),
        }


def measured(text: str) -> float:
    """Return the number of a reply, NaN for SCPI's mark of something that was not measured."""
    value = float(text)
    return math.nan if value == NOT_A_NUMBER else value
