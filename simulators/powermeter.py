"""Power meter: reads a power again and again while its gate is open, and speaks SCPI.

===============================  =====================================================================
command                          does
===============================  =====================================================================
``CONFigure:POWer:TIMed s``      sets the width of the gate, 1e-6 .. 1e5 s
``INITiate[:IMMediate]``         opens the gate now
``FETCh?``                       number of the gate, mean power, variance of that mean, number of readings,
                                 width [s]; ``BUSY`` while the gate is open
``ABORt``                        closes the gate and forgets what it read
``STATus:OPERation:CONDition?``  16 while the gate is open
===============================  =====================================================================

and the common and required commands of `simulators.status`.
"""

from __future__ import annotations

from collections.abc import Callable

from daq.ports import Clock
from simulators.hosts import Send
from simulators.lines import LineSession
from simulators.motion import NS
from simulators.scpi import Command, FaultError, Interpreter, decimal
from simulators.status import Status

MEASURING = 16

Read = Callable[[int, int], tuple[float, float, int]]  # an interval [ns] -> mean, its variance, readings


class PowerMeter:
    """A power meter; `read` gives what it reads between two times."""

    def __init__(self, name: str, read: Read, clock: Clock) -> None:
        self._read, self._clock = read, clock
        self._width_ns, self._open_ns, self._gates = NS, -1, 0
        commands = {
            "*IDN?": Command(lambda: f"tercet simulators,power meter,{name},1"),
            "*RST": Command(self._abort),
            "CONFigure:POWer:TIMed": Command(self._configure, (decimal,)),
            "INITiate[:IMMediate]": Command(self._initiate),
            "FETCh?": Command(self._fetch),
            "ABORt": Command(self._abort),
        }
        status = Status(self._condition, lambda: bool(self._interpreter.responses))
        self._interpreter = Interpreter({**status.commands(), **commands}, status.report)

    def session(self, send: Send) -> LineSession:
        """Return a session; the meter never speaks unasked."""
        return LineSession(self._interpreter.answer)

    def _condition(self) -> int:
        since_ns = self._clock.now_ns() - self._open_ns
        return MEASURING if self._open_ns >= 0 and since_ns < self._width_ns else 0

    def _configure(self, seconds: float) -> None:
        if not 1e-6 <= seconds <= 1e5:
            raise FaultError(-222)
        self._width_ns = round(seconds * NS)

    def _initiate(self) -> None:
        if self._condition():
            raise FaultError(-213)
        self._open_ns, self._gates = self._clock.now_ns(), self._gates + 1

    def _fetch(self) -> str:
        if self._open_ns < 0:
            raise FaultError(-230)
        if self._condition():
            return "BUSY"
        mean, variance, readings = self._read(self._open_ns, self._open_ns + self._width_ns)
        return f"{self._gates},{mean:+.12E},{variance:+.12E},{readings},{self._width_ns / NS:.9f}"

    def _abort(self) -> None:
        self._open_ns = -1
