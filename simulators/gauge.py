"""A pressure gauge and a beam shutter that speak plain text.

=============  ==========================================================================================
gauge          ``who`` -> ``GAUGE lantern 1``; ``pressure`` -> ``p = 2.100E-05 Pa ok``; ``# ...`` unasked
shutter        ``who`` -> ``SHUTTER 1``; ``block``, ``unblock`` -> ``done`` (it then moves for 0.2 s);
               ``where`` -> ``blocked``, ``open`` or ``moving``
anything else  ``what?``
=============  ==========================================================================================
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from daq.ports import Clock
from simulators.hosts import Send
from simulators.lines import LineSession
from simulators.motion import NS

TRAVEL_S = 0.2


class Gauge:
    """A gauge on a chamber that is pumped down; `trip` multiplies the pressure for a while."""

    def __init__(self, name: str, clock: Clock) -> None:
        self._name, self._clock = name, clock
        self._trips: list[tuple[int, int, float]] = []
        self._sends: list[Send] = []

    def session(self, send: Send) -> LineSession:
        """Return a session; every full minute that it is asked in, the gauge speaks unasked first."""
        self._sends.append(send)
        return LineSession(self._answer)

    def trip(self, seconds: float, factor: float) -> None:
        """Let the pressure be so many times higher for a while."""
        now_ns = self._clock.now_ns()
        self._trips.append((now_ns, now_ns + round(seconds * NS), factor))

    def chat(self) -> None:
        """Say something that nobody asked for."""
        for send in self._sends:
            send(b"# degas due\n")

    def _answer(self, line: str) -> str:
        now_ns = self._clock.now_ns()
        if line == "who":
            return f"GAUGE {self._name} 1"
        if line != "pressure":
            return "what?"
        pressure_pa = 1e-5 * (1 + np.exp(-now_ns / (3600 * NS)))
        for start_ns, stop_ns, factor in self._trips:
            pressure_pa *= factor if start_ns <= now_ns < stop_ns else 1.0
        return f"p = {pressure_pa:.3E} Pa ok"


class ShutterBox:
    """A shutter, shut when it is switched on; as a factor of the source it takes the light away."""

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._moves: list[tuple[int, bool]] = [(-NS, False)]

    def session(self, send: Send) -> LineSession:
        """Return a session; the shutter never speaks unasked."""
        return LineSession(self._answer)

    def __call__(self, time_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return what it lets pass at times [s]: nothing before it is open and once it begins to shut."""
        factor = np.zeros(np.shape(time_s))
        for at_ns, opens in self._moves:
            since_s = at_ns / NS + (TRAVEL_S if opens else 0.0)
            factor = np.where(time_s >= since_s, float(opens), factor)
        return factor

    def _answer(self, line: str) -> str:
        now_ns = self._clock.now_ns()
        at_ns, is_open = self._moves[-1]
        if line == "who":
            return "SHUTTER 1"
        if line == "where":
            moving = now_ns < at_ns + round(TRAVEL_S * NS)
            return "moving" if moving else "open" if is_open else "blocked"
        if line not in ("block", "unblock"):
            return "what?"
        if is_open != (line == "unblock"):
            self._moves.append((now_ns, line == "unblock"))
        return "done"
