"""Counters: a simulated gated counter that speaks SCPI.

===============================  =====================================================================
command                          does
===============================  =====================================================================
``CONFigure:TOTalize:TIMed s``   sets the width of the gate, 1e-6 .. 1e5 s (1 s after ``*RST``)
``CONFigure:TOTalize:TIMed?``    the width [s]
``CONFigure:TOTalize:SLICes n``  divides every gate into n equal parts (at most 1000; 0 after ``*RST``)
``INITiate[:IMMediate]``         opens the gate now; -213 while one is open or being read out
``FETCh?``                       number of the gate, width [s], overflow (0, 1), counts by channel, then by
                                 part of the gate and channel; ``BUSY`` until the readout is over; -230 and
                                 no reply when there is nothing to fetch
``ABORt``                        closes the gate and forgets what it counted
``TOTalize:NUMBer?``             number of the last gate since power was switched on
``STATus:OPERation:CONDition?``  16 while the gate is open, 256 while it is read out
===============================  =====================================================================

and the common and required commands of `simulators.status`. The subset and the replies are this counter's
own, within the rules of SCPI-1999.
"""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from itertools import pairwise

from daq.ports import Clock
from simulators.hosts import Send
from simulators.lines import LineSession
from simulators.motion import NS
from simulators.scpi import Command, FaultError, Interpreter, decimal
from simulators.status import Status

MEASURING, READING_OUT = 16, 256
CAPACITY = 2**32 - 1

_NARROWEST_S, _WIDEST_S, _RESET_S = 1e-6, 1e5, 1.0
_MOST_SLICES = 1000


@dataclass(frozen=True, slots=True)
class Gate:
    """An open or closed gate, times on the run clock."""

    number: int
    open_ns: int
    close_ns: int


Count = Callable[[int, int], tuple[int, ...]]


class GatedCounter:
    """A counter; `count` draws what each channel has counted, from opening and end of a gate or a part [ns].

    Parameters
    ----------
    parts
        In how many parts at least a gate is drawn, whether they are asked for or not.

    Attributes
    ----------
    watchers
        Told of every gate that opens.
    """

    def __init__(self, name: str, count: Count, readout_s: float, clock: Clock, parts: int = 1) -> None:
        self._count, self._readout_ns, self._clock = count, round(readout_s * NS), clock
        self._width_ns = round(_RESET_S * NS)
        self._gates = 0
        self.watchers: list[Callable[[Gate], None]] = []
        self._gate: Gate | None = None
        self._slices, self._least_parts = 0, parts
        self._counted: tuple[tuple[int, ...], ...] = ()  # by part of the gate
        self._drawing = threading.Lock()
        status = Status(self._condition, lambda: bool(self._interpreter.responses))
        commands = {
            "*IDN?": Command(lambda: f"tercet simulators,gated counter,{name},1"),
            "*RST": Command(self._reset),
            "CONFigure:TOTalize:TIMed": Command(self._configure, (decimal,)),
            "CONFigure:TOTalize:TIMed?": Command(lambda: f"{self._width_ns / NS:.9f}"),
            "CONFigure:TOTalize:SLICes": Command(self._divide, (decimal,)),
            "INITiate[:IMMediate]": Command(self._initiate),
            "FETCh?": Command(self._fetch),
            "ABORt": Command(self._abort),
            "TOTalize:NUMBer?": Command(lambda: str(self._gates)),
        }
        self._interpreter = Interpreter({**status.commands(), **commands}, status.report)

    def session(self, send: Send) -> LineSession:
        """Return a session; the counter never speaks unasked."""
        return LineSession(self._interpreter.answer)

    def _condition(self) -> int:
        if self._gate is None:
            return 0
        since_close_ns = self._clock.now_ns() - self._gate.close_ns
        if since_close_ns < 0:
            return MEASURING
        return READING_OUT if since_close_ns < self._readout_ns else 0

    def _configure(self, width_s: float) -> None:
        if not _NARROWEST_S <= width_s <= _WIDEST_S:
            raise FaultError(-222)
        if self._condition():
            raise FaultError(-221)
        self._width_ns = round(width_s * NS)

    def _divide(self, parts: float) -> None:
        if parts not in range(_MOST_SLICES + 1):
            raise FaultError(-222)
        if self._condition():
            raise FaultError(-221)
        self._slices = int(parts)

    def _initiate(self) -> None:
        if self._condition():
            raise FaultError(-213)
        self._gates += 1
        open_ns = self._clock.now_ns()
        self._gate = Gate(self._gates, open_ns, open_ns + self._width_ns)
        self._counted = ()
        for watcher in self.watchers:
            watcher(self._gate)

    def _fetch(self) -> str:
        if self._gate is None:
            raise FaultError(-230)
        return "BUSY" if self._condition() else self._answer_of(self._gate)

    def _answer_of(self, gate: Gate) -> str:
        drawn = self.drawn(gate)
        counts = tuple(map(sum, zip(*drawn, strict=True)))
        numbers = [*counts, *(count for part in drawn if self._slices for count in part)]
        width_s, overflow = (gate.close_ns - gate.open_ns) / NS, int(max(counts) > CAPACITY)
        return (
            f"{gate.number},{width_s:.9f},{overflow},{','.join(str(min(one, CAPACITY)) for one in numbers)}"
        )

    def drawn(self, gate: Gate) -> tuple[tuple[int, ...], ...]:
        """Return what each channel counted in each part of a gate, nothing for one that was given up."""
        with self._drawing:  # on a real clock a stream of events asks from a thread of its own
            if gate is not self._gate:
                return ()
            if not self._counted:
                self._counted = tuple(self._count(*part) for part in self.parts(gate))
            return self._counted

    def parts(self, gate: Gate) -> Iterable[tuple[int, int]]:
        """Return opening and end of every part of a gate [ns]."""
        parts, width_ns = self._slices or self._least_parts, gate.close_ns - gate.open_ns
        return pairwise(gate.open_ns + width_ns * part // parts for part in range(parts + 1))

    def _abort(self) -> None:
        self._gate = None

    def _reset(self) -> None:
        self._abort()
        self._width_ns, self._slices = round(_RESET_S * NS), 0
