"""List mode: a gated counter that also sends every event, over a stream of its own.

The counts of a gate come twice, as the counter's total and as its events; what does not agree is in doubt,
and the gate is counted again. A gate in which the source had to throw events away is flagged as one that
overflowed.
"""

from __future__ import annotations

import math
from dataclasses import replace

from daq.description.device import DeviceEntry
from daq.description.rig import Rig
from daq.devices.counter import ScpiCounter
from daq.devices.events import U32, U64
from daq.devices.intake import Form, Intake
from daq.devices.lines import CHECK
from daq.errors import DeviceError
from daq.ports import Clock, Counted


class ListModeCounter(ScpiCounter):
    """A gated counter with a stream of events beside it.

    Parameters
    ----------
    name
        The device in the rig.
    entry
        The addresses of counter and stream, the unit of its times, channels and slices.
    clock
        The run clock.
    """

    def __init__(self, name: str, entry: DeviceEntry, clock: Clock) -> None:
        # the stream says in which part of a gate an event came: the counter need not
        super().__init__(name, entry.model_copy(update={"slices": 0}), clock)
        layout = {32: U32, 64: U64}[entry.word_bits]
        self._form = Form(layout, entry.channels, entry.slices)
        self._tick_s, self._stream = entry.tick_s, str(entry.stream)
        self._intake: Intake | None = None
        self._last: Counted | None = None

    @classmethod
    def of_rig(cls, name: str, rig: Rig, clock: Clock) -> tuple[ListModeCounter, ...]:
        """Return the counter of a rig."""
        return (cls(name, rig.devices[name], clock),)

    def open(self) -> None:
        """Open link and stream, and bring the counter into its reset state."""
        super().open()
        where = f"counter {self.name}, stream on {self._stream}"
        try:
            connection = self._clock.connect(self._stream, self._entry.timeout_s)
        except OSError as error:
            self.close()
            raise DeviceError(f"nobody answers ({error})", where=where, remedy=CHECK, kind="lost") from error
        self._intake = Intake(self._clock, connection, self._form, where)

    def close(self) -> None:
        """Let link and stream go; never raises."""
        intake, self._intake = self._intake, None
        if intake is not None:
            intake.close()
        super().close()

    def arm(self, dwell_s: float) -> None:
        """Open the gate now for a dwell; never tried twice; raises DeviceError."""
        self._last = None
        if self._intake is not None and math.isfinite(dwell_s):
            self._intake.ticks = max(1, -(-round(dwell_s / self._tick_s) // max(self._form.slices, 1)))
        super().arm(dwell_s)

    def read(self) -> Counted:
        """Return what the last gate counted, with its events; waits for both.

        Raises
        ------
        DeviceError
            Also "garbage" when counter and stream do not agree.
        """
        counted = super().read()
        if self._last is None:
            self._last = self._with_events(counted)
        return self._last

    def _with_events(self, counted: Counted) -> Counted:
        if self._intake is None or self._gate is None:
            raise self._error("its stream is not open", kind="lost")
        gathered = self._intake.take(self._gate, self._clock.now_ns() + round(self._entry.timeout_s * 1e9))
        sent, lost = tuple(gathered.binned.counts.sum(axis=0).tolist()), gathered.binned.lost > 0
        if sent != counted.values and not (lost or counted.overflow):
            raise self._error(f"it counted {counted.values} and sent {sent} events", kind="garbage")
        slices = tuple(map(tuple, gathered.binned.counts.tolist())) if self._form.slices else None
        overflow = counted.overflow or lost
        return replace(counted, overflow=overflow, slices=slices, events=gathered.packed())
