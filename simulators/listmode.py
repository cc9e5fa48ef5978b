"""List mode: event words of a gate, an instrument that sends them, and a source at a steady high rate."""

from __future__ import annotations

import socket
import threading
import time
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from daq.description.device import DeviceEntry
from daq.devices.events import U32, U64, Layout
from daq.ports import Clock
from simulators.counters import Gate, GatedCounter
from simulators.draws import generator
from simulators.hosts import Send, Session
from simulators.motion import NS

PARTS = 16  # of a gate, within which events are spread evenly
FIFO_BYTES = 4 * 1024 * 1024
_PIECE = 64 * 1024
_LOOK_S = 0.002

Times = NDArray[np.uint64]


def gate_words(layout: Layout, number: int, ticks: Times, channel: NDArray[np.uint64]) -> bytes:
    """Return the words of one gate: its opening, events in the order of their ticks, roll-overs, its end."""
    bits, order = np.uint64(layout.tag_bits), np.argsort(ticks, kind="stable")
    ticks, channel = ticks[order], channel[order]
    steps = np.diff(ticks >> bits, prepend=np.uint64(0)).astype(np.int64)
    at = np.flatnonzero(steps)
    rolls = np.array([layout.special(layout.rolled, int(steps[place])) for place in at], dtype=np.uint64)
    words = channel << bits | ticks & np.uint64((1 << layout.tag_bits) - 1)
    marks = [layout.special(kind, number) for kind in (layout.opened, layout.closed)]
    whole = np.concatenate([np.array(marks[:1], np.uint64), np.insert(words, at, rolls), marks[1:]])
    return whole.astype(layout.dtype).tobytes()


def example_words(
    layout: Layout, events: int, per_roll: int, channels: int, seed: int, gate: int = 1
) -> bytes:
    """Return a gate of events, evenly in time, with a roll-over after so many on average."""
    random = np.random.default_rng(seed)
    high = -(-events // per_roll) << layout.tag_bits
    ticks = random.integers(0, high, events, dtype=np.uint64)
    return gate_words(layout, gate, ticks, random.integers(0, channels, events, dtype=np.uint64))


class EventStream:
    """Sends the events of every gate of a counter when it closes, to whoever is connected.

    Parameters
    ----------
    counter
        Whose gates.
    layout, tick_s
        Of the words.
    dead_ticks
        No two events of a channel are nearer; a part of a tick counts.
    seed
        Of the times.
    clock
        The run clock.
    """

    def __init__(
        self, counter: GatedCounter, layout: Layout, tick_s: float, dead_ticks: float, seed: int, clock: Clock
    ) -> None:
        self._counter, self._layout, self._clock = counter, layout, clock
        self._tick_s, self._dead_ticks, self._seed = tick_s, dead_ticks, seed
        self._sends: list[Send] = []
        counter.watchers.append(lambda gate: clock.call_at(gate.close_ns, lambda: self._end(gate)))

    @classmethod
    def of(
        cls, counter: GatedCounter, entry: DeviceEntry, dead_time_s: float, seed: int, clock: Clock
    ) -> EventStream:
        """Return the stream of a counter of a rig."""
        layout = {32: U32, 64: U64}[entry.word_bits]
        return cls(counter, layout, entry.tick_s, dead_time_s / entry.tick_s, seed, clock)

    def session(self, send: Send) -> Session:
        """Return a session; what the client says is not heard."""
        self._sends.append(send)
        return _Deaf()

    def _end(self, gate: Gate) -> None:
        drawn = self._counter.drawn(gate)
        if not drawn:
            return
        words = gate_words(self._layout, gate.number, *self._events(gate, drawn))
        for send in self._sends:
            send(words)

    def _events(self, gate: Gate, drawn: Sequence[Sequence[int]]) -> tuple[Times, Times]:
        random = generator(self._seed, "events", gate.open_ns)
        ticks, channels = list[Times](), list[Times]()
        for (start_ns, stop_ns), counts in zip(self._counter.parts(gate), drawn, strict=True):
            first, last = (self._ticks(at - gate.open_ns) for at in (start_ns, stop_ns))
            for channel, many in enumerate(counts):
                ticks.append(spaced(many, first, last, self._dead_ticks, random))
                channels.append(np.full(many, channel, np.uint64))
        return np.concatenate(ticks), np.concatenate(channels)

    def _ticks(self, ns: int) -> int:
        return round(ns / NS / self._tick_s)


def spaced(many: int, first: int, last: int, dead: float, random: np.random.Generator) -> Times:
    """Return so many times [ticks] between two, none nearer than `dead` to the one before, otherwise even.

    Notes
    -----
    Given their number, events of a Poisson process behind a non-paralysable dead time are evenly spread over
    the live time, with the dead times put back between them; the last one's ends before `last`, so that the
    next stretch may begin there. A counter gives the whole ticks that have passed.
    """
    dead = min(dead, (last - first) / max(many, 1))
    live = np.sort(random.random(many)) * (last - first - dead * many)
    return (first + live + dead * np.arange(many)).astype(np.uint64)


class _Deaf:
    def feed(self, data: bytes) -> bytes:
        return b""


class StreamSource:
    """Sends gate after gate of the same events at a rate, to one client, as fast as they are taken.

    Attributes
    ----------
    sent, lost
        Events that went out, and events that did not fit into the buffer; words say how many.
    """

    def __init__(self, words: bytes, layout: Layout, rate_hz: float, fifo_bytes: int = FIFO_BYTES) -> None:
        self.sent = self.lost = 0
        self._size, self._fifo, self._rate_hz, self._layout = layout.bits // 8, fifo_bytes, rate_hz, layout
        self._body = words[self._size : -self._size]  # without its marks, that each gate gets anew

    def run(self, client: socket.socket, over: threading.Event, gates: int) -> None:
        """Send so many gates, or until `over` is set; a client that takes nothing fills the buffer."""
        began_s, done = time.monotonic(), 0
        for number in range(1, gates + 1):
            client.sendall(self._mark(self._layout.opened, number))
            place = 0
            while place < len(self._body) and not over.is_set():
                due = int(self._rate_hz * self._size * (time.monotonic() - began_s))
                waiting = min(due - done, len(self._body) - place)
                if waiting > self._fifo:
                    size = (waiting - self._fifo) // self._size * self._size
                    self._lose(client, size)
                elif waiting < min(_PIECE, len(self._body) - place):
                    time.sleep(_LOOK_S)
                    continue
                else:
                    size = min(_PIECE, waiting)
                    client.sendall(self._body[place : place + size])
                    self.sent += size // self._size
                place, done = place + size, done + size
            client.sendall(self._mark(self._layout.closed, number))

    def _lose(self, client: socket.socket, size: int) -> None:
        client.sendall(self._mark(self._layout.rolled - 1, size // self._size))
        self.lost += size // self._size

    def _mark(self, number: int, tag: int) -> bytes:
        return self._layout.special(number, tag).to_bytes(self._size, "little")
