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
from simulators.shot import Shot
from simulators.status import Status

Read = Callable[[int, int], tuple[float, float, int]]  # an interval [ns] -> mean, its variance, readings


class PowerMeter:
    """A power meter; `read` gives what it reads between two times."""

    def __init__(self, name: str, read: Read, clock: Clock) -> None:
        self._read, self._shot, self._gates = read, Shot(clock, 1e5), 0
        commands = {
            "*IDN?": Command(lambda: f"tercet simulators,power meter,{name},1"),
            "*RST": Command(self._shot.abort),
            "CONFigure:POWer:TIMed": Command(self._shot.set_width, (decimal,)),
            "INITiate[:IMMediate]": Command(self._initiate),
            "FETCh?": Command(self._fetch),
            "ABORt": Command(self._shot.abort),
        }
        status = Status(self._shot.condition, lambda: bool(self._interpreter.responses))
        self._interpreter = Interpreter({**status.commands(), **commands}, status.report)

    def session(self, send: Send) -> LineSession:
        """Return a session; the meter never speaks unasked."""
        return LineSession(self._interpreter.answer)

    def _initiate(self) -> None:
        self._shot.begin()
        self._gates += 1

    def _fetch(self) -> str:
        interval_ns = self._shot.interval_ns()
        if interval_ns is None:
            raise FaultError(-230)
        if self._shot.condition():
            return "BUSY"
        mean, variance, readings = self._read(*interval_ns)
        return f"{self._gates},{mean:+.12E},{variance:+.12E},{readings},{self._shot.width_ns / NS:.9f}"
