"""Totalisers: a counter that runs all the time and rolls over, and a frequency meter; both speak SCPI."""

from __future__ import annotations

from collections.abc import Callable

from daq.ports import Clock
from simulators.hosts import Send
from simulators.lines import LineSession
from simulators.motion import NS
from simulators.scpi import Command, FaultError, Interpreter, decimal
from simulators.status import Status

MEASURING = 16

Count = Callable[[int, int], int]


class Totaliser:
    """Counts from the moment it is asked first; ``TOTalize:DATA?`` gives the total, modulo 2**bits.

    Parameters
    ----------
    name
        In its identity.
    count
        Draws what an interval of run time [ns] has counted.
    bits
        It rolls over at 2**bits.
    clock
        The run clock.
    """

    def __init__(self, name: str, count: Count, bits: int, clock: Clock) -> None:
        self._count, self._clock, self._size = count, clock, 1 << bits
        self.total, self._seen_ns = 0, clock.now_ns()
        commands = {
            "*IDN?": Command(lambda: f"tercet simulators,totaliser of {bits} bits,{name},1"),
            "*RST": Command(lambda: None),
            "TOTalize:DATA?": Command(self._data),
        }
        status = Status(lambda: 0, lambda: bool(self._interpreter.responses))
        self._interpreter = Interpreter({**status.commands(), **commands}, status.report)

    def session(self, send: Send) -> LineSession:
        """Return a session; the totaliser never speaks unasked."""
        return LineSession(self._interpreter.answer)

    def _data(self) -> str:
        now_ns = self._clock.now_ns()
        if now_ns > self._seen_ns:
            self.total += self._count(self._seen_ns, now_ns)
            self._seen_ns = now_ns
        return f"TOT {self.total % self._size}"


class FrequencyMeter:
    """``FREQuency:APERture s`` and ``INITiate`` measure a mean rate, ``FETCh?`` gives it [Hz].

    ``FETCh?`` gives SCPI's 9.91E37 while nothing has been measured; bit 4 of the operation condition is set
    while a measurement is under way.
    """

    def __init__(self, name: str, count: Count, clock: Clock) -> None:
        self._count, self._clock = count, clock
        self._aperture_ns, self._open_ns = NS, -1
        commands = {
            "*IDN?": Command(lambda: f"tercet simulators,frequency meter,{name},1"),
            "*RST": Command(self._abort),
            "FREQuency:APERture": Command(self._aperture, (decimal,)),
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
        running = 0 <= self._clock.now_ns() - self._open_ns < self._aperture_ns
        return MEASURING if self._open_ns >= 0 and running else 0

    def _aperture(self, seconds: float) -> None:
        if not 1e-6 <= seconds <= 1e4:
            raise FaultError(-222)
        self._aperture_ns = round(seconds * NS)

    def _initiate(self) -> None:
        if self._condition():
            raise FaultError(-213)
        self._open_ns = self._clock.now_ns()

    def _fetch(self) -> str:
        if self._open_ns < 0 or self._condition():
            return "+9.91000000E+37"
        counts = self._count(self._open_ns, self._open_ns + self._aperture_ns)
        return f"{counts * NS / self._aperture_ns:+.12E}"

    def _abort(self) -> None:
        self._open_ns = -1
