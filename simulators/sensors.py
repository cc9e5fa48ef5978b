"""Sensors: a simulated room sensor that speaks SCPI, temperature [K] and pressure [Pa]."""

from __future__ import annotations

import math

from daq.ports import Clock
from simulators.hosts import Send
from simulators.lines import LineSession
from simulators.motion import NS
from simulators.scpi import Command, Interpreter
from simulators.status import Status

_DAY_S = 86_400.0


def temperature_k(time_s: float) -> float:
    """Return the room's temperature: 0.4 K of a day's wave and 0.1 K of a slow air conditioner [K]."""
    return 293.65 + 0.4 * math.cos(math.tau * time_s / _DAY_S) + 0.1 * math.sin(math.tau * time_s / 1500.0)


def pressure_pa(time_s: float) -> float:
    """Return the air pressure, a wave of 300 Pa in two days [Pa]."""
    return 101_325.0 + 300.0 * math.sin(math.tau * time_s / (2 * _DAY_S))


class RoomSensor:
    """Answers ``MEASure:TEMPerature?`` and ``MEASure:PRESsure?``; its curves begin with the run clock."""

    def __init__(self, name: str, clock: Clock) -> None:
        def now_s() -> float:
            return clock.now_ns() / NS

        status = Status(lambda: 0, lambda: bool(self._interpreter.responses))
        commands = {
            "*IDN?": Command(lambda: f"tercet simulators,room sensor,{name},1"),
            "*RST": Command(lambda: None),
            "MEASure:TEMPerature?": Command(lambda: f"{temperature_k(now_s()):.6E}"),
            "MEASure:PRESsure?": Command(lambda: f"{pressure_pa(now_s()):.6E}"),
        }
        self._interpreter = Interpreter({**status.commands(), **commands}, status.report)

    def session(self, send: Send) -> LineSession:
        """Return a session; the sensor never speaks unasked."""
        return LineSession(self._interpreter.answer)
