"""Totalisers: a counter that runs all the time and rolls over, and a frequency meter; both speak SCPI."""

from __future__ import annotations

from collections.abc import Callable

from daq.ports import Clock
from simulators.hosts import Send
from simulators.lines import LineSession
from simulators.motion import NS
from simulators.scpi import Command, Interpreter, decimal
from simulators.shot import Shot
from simulators.status import Status

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
        self._count, self._shot = count, Shot(clock, 1e4)
        commands = {
            "*IDN?": Command(lambda: f"tercet simulators,frequency meter,{name},1"),
            "*RST": Command(self._shot.abort),
            "FREQuency:APERture": Command(self._shot.set_width, (decimal,)),
            "INITiate[:IMMediate]": Command(self._shot.begin),
            "FETCh?": Command(self._fetch),
            "ABORt": Command(self._shot.abort),
        }
        status = Status(self._shot.condition, lambda: bool(self._interpreter.responses))
        self._interpreter = Interpreter({**status.commands(), **commands}, status.report)

    def session(self, send: Send) -> LineSession:
        """Return a session; the meter never speaks unasked."""
        return LineSession(self._interpreter.answer)

    def _fetch(self) -> str:
        interval_ns = self._shot.interval_ns()
        if interval_ns is None or self._shot.condition():
            return "+9.91000000E+37"
        return f"{self._count(*interval_ns) * NS / self._shot.width_ns:+.12E}"
