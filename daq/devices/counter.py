"""Counter: a gated counter that speaks SCPI."""

from __future__ import annotations

import math
import re

from daq.description.device import DeviceEntry
from daq.description.rig import Rig
from daq.devices.links import Link
from daq.devices.slices import adds_up, in_slices, whole_numbers
from daq.devices.wire import Wire
from daq.errors import DeviceError
from daq.ports import Clock, Counted

MEASURING = 16  # SCPI-1999, vol. 1, sect. 9: bit 4 of the operation status register

_ARMED = r'(?P<error>[+-]?\d+),"(?P<text>[^"]*)";(?P<gate>\d+)'
_FETCHED = (
    r"BUSY|(?P<gate>\d+),(?P<width>\d+\.\d{{9}}),(?P<overflow>[01])"
    r"(?P<counts>(?:,\d+){{{channels}}})(?P<slices>(?:,\d+){{{sliced}}})"
)
_DIGITS = 12  # of a count and its comma, at most
_POLL_S = 0.01


class ScpiCounter:
    """A gated counter; every gate has a number, so that no count is taken for another gate's.

    Parameters
    ----------
    name
        The device in the rig.
    entry
        Its address, and how long its readout takes.
    clock
        The run clock.
    """

    port = "counter"

    def __init__(self, name: str, entry: DeviceEntry, clock: Clock) -> None:
        self.name = name
        self._clock, self._entry = clock, entry
        sliced = entry.slices * entry.channels
        self._fetched = re.compile(_FETCHED.format(channels=entry.channels, sliced=sliced))
        most_bytes = 256 + _DIGITS * (entry.channels + sliced)
        self._link = Link(clock, entry.address, Wire(timeout_s=entry.timeout_s, most_bytes=most_bytes), name)
        self._gate: int | None = None  # its number, once the counter has said that it is open
        self._ready_ns = 0

    @classmethod
    def of_rig(cls, name: str, rig: Rig, clock: Clock) -> tuple[ScpiCounter, ...]:
        """Return the counter of a rig."""
        return (cls(name, rig.devices[name], clock),)

    def open(self) -> None:
        """Open the link, bring the counter into its reset state, and say how a gate is divided."""
        self._gate = None
        self._link.open()
        divided = f":CONF:TOT:SLIC {self._entry.slices};" if self._entry.slices else ""
        self._link.ask(f"*RST;*CLS;{divided}:SYST:ERR?", r'[+-]?0,"No error"', safe_to_repeat=True)

    def close(self) -> None:
        """Let the link go; never raises."""
        self._link.close()

    def identity(self) -> str:
        """Return the identity reply, verbatim."""
        return self._link.identity

    def arm(self, dwell_s: float) -> None:
        """Open the gate now for a dwell; never tried twice.

        Raises
        ------
        DeviceError
            When the counter refuses, or when its answer leaves open whether it counts.
        """
        self._gate = None
        if not (math.isfinite(dwell_s) and dwell_s > 0):
            raise self._error(f"a gate of {dwell_s:g} s cannot be counted; nothing was sent")
        armed = self._link.ask(f"ABOR;CONF:TOT:TIM {dwell_s:.9f};:INIT;:SYST:ERR?;:TOT:NUMB?", _ARMED)
        if int(armed["error"]):
            self._link.tell("ABOR;*CLS")
            raise self._error(f"it did not open a gate of {dwell_s:g} s: {armed['text']}")
        self._gate = int(armed["gate"])
        self._ready_ns = self._clock.now_ns() + round((dwell_s + self._entry.readout_s) * 1e9)

    def busy(self) -> bool:
        """Return whether the gate is still open."""
        condition = self._link.ask(":STAT:OPER:COND?", r"\+?\d+", safe_to_repeat=True)
        return bool(int(condition[0]) & MEASURING)

    def read(self) -> Counted:
        """Return what the last gate counted, waiting for what is left of the gate and its readout.

        Raises
        ------
        DeviceError
            When no gate was armed, when the count does not come, or when it belongs to another gate.
        """
        if self._gate is None:
            raise self._error("there is no gate to read: none was armed, or its arming was in doubt")
        self._clock.sleep_until(self._ready_ns)
        fetched = self._fetch()
        while fetched["gate"] is None:
            if self._clock.now_ns() > self._ready_ns + self._entry.timeout_s * 1e9:
                raise self._error("its readout does not end", kind="timeout")
            self._clock.sleep_until(self._clock.now_ns() + round(_POLL_S * 1e9))
            fetched = self._fetch()
        if int(fetched["gate"]) != self._gate:
            what = f"it gave the count of gate {fetched['gate']} and not of gate {self._gate}"
            raise self._error(what, kind="garbage")
        values, overflow = whole_numbers(fetched["counts"]), fetched["overflow"] == "1"
        slices = in_slices(whole_numbers(fetched["slices"]), len(values))
        if not (overflow or adds_up(values, slices)):
            raise self._error("the parts of its gate do not add up to the count", kind="garbage")
        return Counted(values, live_s=float(fetched["width"]), overflow=overflow, slices=slices)

    def abort(self) -> None:
        """Close the gate and forget what it counted."""
        self._gate = None
        self._link.tell("ABOR")

    def _fetch(self) -> re.Match[str]:
        return self._link.ask(":FETC?", self._fetched, safe_to_repeat=True)

    def _error(self, what: str, kind: str = "refused") -> DeviceError:
        remedy = "The stand is repeated; if it happens again, look at the counter"
        return DeviceError(what, where=f"counter {self.name}", remedy=remedy, kind=kind)
