"""Upsets: how injected faults reach replies, axes, beam, counts and clock of a simulated bench."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from daq.ports import Clock
from simulators.counters import CAPACITY, Gate, GatedCounter
from simulators.faults import Fault, Faults, Script
from simulators.gauge import Gauge
from simulators.hosts import Instrument, Send, Session
from simulators.motion import NS, Track
from simulators.scpi_stage import ScpiStage
from simulators.stages import StageController


class Power(Protocol):
    """What can go away and come back: a host."""

    def open(self) -> None:
        """Answer connections from now on."""

    def close(self) -> None:
        """End every connection and refuse new ones."""


class Beam:
    """What faults do to the light, as a factor of the source; a change takes up to 0.25 s, its grid."""

    def __init__(self) -> None:
        self._steps: list[tuple[float, float]] = []
        self._off: list[tuple[float, float]] = []

    def step(self, at_s: float, factor: float) -> None:
        """Multiply the light from a time on."""
        self._steps.append((at_s, factor))

    def block(self, at_s: float, seconds: float) -> None:
        """Let no light pass for some time."""
        self._off.append((at_s, at_s + seconds))

    def __call__(self, time_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """Return the factor at times [s]."""
        factor = np.ones(np.shape(time_s))
        for at_s, step in self._steps:
            factor = np.where(time_s >= at_s, factor * step, factor)
        for start_s, stop_s in self._off:
            factor = np.where((time_s >= start_s) & (time_s < stop_s), 0.0, factor)
        return factor


class Upsets:
    """Everything that a script does to one bench.

    Parameters
    ----------
    clock
        The run clock.
    step_utc
        Moves UTC against the run clock by so many nanoseconds; the real clock is nobody's to set.
    """

    def __init__(self, clock: Clock, step_utc: Callable[[int], None] = lambda by_ns: None) -> None:
        self.beam, self.to_monitor = Beam(), Beam()
        self.faults: Faults | None = None
        self._clock, self._step_utc = clock, step_utc
        self._saturated: list[tuple[str, float, int]] = []
        self._full: list[tuple[int, float]] = []  # until when, and what is left

    def begin(
        self,
        script: Script,
        hosts: Mapping[str, Power],
        instruments: Mapping[str, Instrument],
        tracks: Mapping[str, Track],
    ) -> None:
        """Let the faults of a script come, on hosts that are up."""
        acts: Mapping[str, Callable[[Fault], None]] = {
            "drop": lambda fault: self._drop(hosts[fault.target], fault.seconds or 0.0),
            "alarm": lambda fault: _trip(instruments[fault.target], fault.text or "limit"),
            "stall": lambda fault: tracks[fault.target].stall(self._clock.now_ns()),
            "slip": lambda fault: tracks[fault.target].slip(
                self._clock.now_ns(), fault.size_mm or 0.0, seen=not fault.hidden
            ),
            "saturation": self._saturate,
            "beam-off": lambda fault: self.beam.block(self._now_s(), fault.seconds or 0.0),
            "monitor-lost": lambda fault: self.to_monitor.block(self._now_s(), fault.seconds or 0.0),
            "beam-step": lambda fault: self.beam.step(self._now_s(), fault.factor or 0.0),
            "trip": lambda fault: _raise(instruments[fault.target], fault),
            "disk-full": self._fill,
            "clock-step": lambda fault: self._step_utc(round((fault.step_s or 0.0) * NS)),
        }
        self.faults = Faults(script, self._clock, acts)
        for instrument in instruments.values():
            if isinstance(instrument, GatedCounter):
                instrument.watchers.append(self._opened)

    def _opened(self, gate: Gate) -> None:
        if self.faults:
            self.faults.gate_opened(gate.number)

    def counted(self, device: str, open_ns: int, close_ns: int, counts: int) -> int:
        """Return what a counter makes of the counts of one gate."""
        if self.faults and self.faults.take(device, "overflow"):
            return CAPACITY + 1
        for saturated, rate_hz, until_ns in self._saturated:
            if saturated == device and open_ns < until_ns:
                counts = min(counts, round(rate_hz * (close_ns - open_ns) / NS))
        return counts

    def free_bytes(self) -> float:
        """Return how much is left on the disk as far as faults have a say."""
        now_ns = self._clock.now_ns()
        return min((left for until_ns, left in self._full if now_ns < until_ns), default=float("inf"))

    def _fill(self, fault: Fault) -> None:
        until_ns = self._clock.now_ns() + round((fault.seconds or 0.0) * NS)
        self._full.append((until_ns, fault.free_bytes or 0.0))

    def _saturate(self, fault: Fault) -> None:
        until_ns = self._clock.now_ns() + round((fault.seconds or 0.0) * NS)
        self._saturated.append((fault.target, fault.rate_hz or 0.0, until_ns))

    def _drop(self, host: Power, seconds: float) -> None:
        host.close()
        self._clock.call_at(self._clock.now_ns() + round(seconds * NS), host.open)

    def _now_s(self) -> float:
        return self._clock.now_ns() / NS


class Spoilt:
    """An instrument whose replies faults may spoil."""

    def __init__(self, device: str, inner: Instrument, upsets: Upsets, clock: Clock) -> None:
        self._device, self._inner, self._upsets, self._clock = device, inner, upsets, clock
        self._answered = set[bytes]()  # first words of messages that have had a reply

    def session(self, send: Send) -> Session:
        """Return a session of the instrument behind it."""
        return _SpoiltSession(self, self._inner.session(send), send)

    def answer(self, inner: Session, data: bytes, send: Send) -> bytes:
        """Return the reply to some bytes, spoilt when a fault is due; what has no reply is never touched."""
        faults, word = self._upsets.faults, data.split(b" ")[0]
        kind = faults.due(self._device) if faults else ""
        if faults and kind == "nak":
            if word not in self._answered:
                return inner.feed(data)
            fault = faults.take(self._device, "reply")
            return f"{(fault and fault.text) or 'refused 9 not now'}\n".encode()
        reply = inner.feed(data)
        if not reply:
            return reply
        self._answered.add(word)
        fault = faults.take(self._device, "reply") if faults and kind else None
        return reply if fault is None or faults is None else self._spoilt(fault, reply, faults, send)

    def _spoilt(self, fault: Fault, reply: bytes, faults: Faults, send: Send) -> bytes:
        if fault.kind == "late":
            at_ns = self._clock.now_ns() + round((fault.seconds or 0.0) * NS)
            self._clock.call_at(at_ns, lambda: send(reply))
        noise = faults.noise(max(len(reply) - 1, 1)) + b"\n"
        return {"half": reply[: len(reply) // 2], "garbage": noise, "double": reply * 2}.get(fault.kind, b"")


class _SpoiltSession:
    def __init__(self, spoilt: Spoilt, inner: Session, send: Send) -> None:
        self._spoilt, self._inner, self._send = spoilt, inner, send

    def feed(self, data: bytes) -> bytes:
        return self._spoilt.answer(self._inner, data, self._send)


def _trip(instrument: Instrument, alarm: str) -> None:
    if isinstance(instrument, StageController | ScpiStage):
        instrument.trip(alarm)


def _raise(instrument: Instrument, fault: Fault) -> None:
    if isinstance(instrument, Gauge):
        instrument.trip(fault.seconds or 0.0, fault.factor or 1.0)
