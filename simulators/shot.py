"""Shot: one measurement of a set width, begun on request, as meters make them."""

from __future__ import annotations

from daq.ports import Clock
from simulators.motion import NS
from simulators.scpi import FaultError

MEASURING = 16  # the bit of the operation condition


class Shot:
    """The width of a meter's measurement, and when the last one began; errors are those of SCPI.

    Parameters
    ----------
    clock
        The run clock.
    most_s
        The longest width [s]; the shortest is a microsecond.
    """

    def __init__(self, clock: Clock, most_s: float) -> None:
        self._clock, self._most_s = clock, most_s
        self.width_ns, self._open_ns = NS, -1

    def condition(self) -> int:
        """Return the operation condition: `MEASURING` while a measurement is under way."""
        running = self._clock.now_ns() - self._open_ns < self.width_ns
        return MEASURING if self._open_ns >= 0 and running else 0

    def set_width(self, seconds: float) -> None:
        """Set the width of the measurements to come."""
        if not 1e-6 <= seconds <= self._most_s:
            raise FaultError(-222)
        self.width_ns = round(seconds * NS)

    def begin(self) -> None:
        """Begin a measurement; refused while one is under way."""
        if self.condition():
            raise FaultError(-213)
        self._open_ns = self._clock.now_ns()

    def interval_ns(self) -> tuple[int, int] | None:
        """Return begin and end of the last measurement; None when there is none, or it was broken off."""
        return (self._open_ns, self._open_ns + self.width_ns) if self._open_ns >= 0 else None

    def abort(self) -> None:
        """Break off, and forget."""
        self._open_ns = -1
