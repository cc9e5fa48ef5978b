"""Intake: list-mode words of one stream, taken as they come and kept gate by gate.

Words stand between two marks that name their gate, so that no event is ever taken for another gate's. On the
real clock a thread takes the bytes and does little else: a disk that is slow for a moment, or a busy
interpreter, costs no word. They are sorted when their gate is asked for, or by the thread when many wait.
"""

from __future__ import annotations

import contextlib
import threading
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from daq.devices.events import Binned, Binner, Layout, Words, times_of
from daq.devices.lines import CHECK
from daq.errors import DeviceError
from daq.ports import Clock, Connection

CHUNK = 256 * 1024  # larger ones do not fit the caches, and are slower
MOST_BYTES = 1 << 30  # that wait to be asked for; then words are left to the source, which marks losses
SORT_BYTES = 1 << 26  # that wait before the thread sorts them itself
_LOOK_NS = 100_000_000
_PAUSE_NS = 10_000_000


@dataclass(frozen=True, slots=True)
class Form:
    """How a stream is read: layout of its words, channels, slices of a gate, whether every event is kept."""

    layout: Layout
    channels: int = 1
    slices: int = 1
    keep: bool = True


@dataclass(slots=True)
class Gathered:
    """What came of one gate: its counts, and times of events in ticks times channels, plus the channel."""

    number: int
    binner: Binner
    times: list[NDArray[np.uint64]] = field(default_factory=list)

    @property
    def binned(self) -> Binned:
        """Counts by (slice, channel), and what was lost."""
        return self.binner.binned

    def packed(self) -> bytes:
        """Return the events in order of time, as an archive takes them."""
        edges = zip(self.times, self.times[1:], strict=False)
        if any(after[0] < before[-1] for before, after in edges):
            whole = np.concatenate(self.times)
            whole.sort(kind="stable")
            self.times = [whole]
        return b"".join(part.astype("<u8", copy=False).data for part in self.times)


class Intake:
    """Takes the words of one connection; `ticks` is how long a slice of the next gates is.

    Parameters
    ----------
    clock
        The run clock.
    connection
        The open stream.
    form
        How it is read.
    where
        Device and address, for messages.
    """

    def __init__(self, clock: Clock, connection: Connection, form: Form, where: str) -> None:
        self.ticks = 1
        self._clock, self._connection, self._form, self._where = clock, connection, form, where
        self._open: Gathered | None = None
        self._done: deque[Gathered] = deque()
        self._rest, self._raw = b"", deque[bytes]()
        self._received, self._given = 0, 0  # bytes so far; two counters, for two threads
        self._sorting = threading.Lock()
        self._came, self._over = clock.event(), threading.Event()
        self._failed: DeviceError | None = None
        self._binner().sort(np.frombuffer(bytes(8), form.layout.dtype))  # what is compiled is compiled now
        self._thread = threading.Thread(target=self._run, daemon=True) if clock.kind == "real" else None
        if self._thread is not None:
            self._thread.start()

    def take(self, number: int, until_ns: int) -> Gathered:
        """Return what came of a gate, waiting for its end; every gate before it is forgotten.

        Raises
        ------
        DeviceError
            "timeout" when its end has not come by `until_ns`, "lost" when the stream has broken.
        """
        while (gate := self._found(number)) is None:
            if self._sort_some():
                continue
            if self._failed is not None:
                raise self._failed
            if self._clock.now_ns() >= until_ns:
                raise self._error(f"the end of gate {number} did not come in the stream", "timeout")
            self._wait(until_ns)
        return gate

    def close(self) -> None:
        """Let the stream go."""
        self._over.set()
        self._connection.close()
        if self._thread is not None:
            self._thread.join(5.0)

    def _receive(self, until_ns: int) -> None:
        """Take the bytes that have come, waiting for them at most until a time; raises DeviceError "lost"."""
        try:
            if not self._clock.wait_readable(self._connection, until_ns):
                return
            data = self._gathered()
        except OSError as error:
            raise self._error(f"stream lost: {error}", "lost") from error
        if not data:
            raise self._error("the device has closed the stream", "lost")
        self._raw.append(data)
        self._received += len(data)
        self._came.set()

    def _gathered(self) -> bytes:
        """Return what has come, in one piece: many small ones cost more than one large one."""
        data = self._connection.recv(CHUNK)
        parts = [data]
        with contextlib.suppress(BlockingIOError):
            while data and sum(map(len, parts)) < CHUNK:
                data = self._connection.recv(CHUNK)
                parts.append(data)
        return b"".join(parts)

    def _found(self, number: int) -> Gathered | None:
        while self._done and self._done[0].number < number:
            self._done.popleft()
        if not self._done or self._done[0].number != number:
            return None
        gate = self._done.popleft()
        self._given = self._received - sum(map(len, tuple(self._raw)))
        return gate

    def _wait(self, until_ns: int) -> None:
        if self._thread is None:
            self._receive(until_ns)
        elif not self._raw and self._failed is None:
            self._came.wait_until(min(until_ns, self._clock.now_ns() + _LOOK_NS))
            self._came.clear()

    def _run(self) -> None:
        while not self._over.is_set():
            try:
                if self._received - self._given < MOST_BYTES:
                    self._receive(self._clock.now_ns() + _LOOK_NS)
                else:
                    self._clock.sleep_until(self._clock.now_ns() + _PAUSE_NS)
            except DeviceError as error:
                self._failed = error
                self._came.set()
                return
            if sum(map(len, tuple(self._raw))) > SORT_BYTES:
                self._sort_some()

    def _sort_some(self) -> bool:
        """Sort the oldest bytes; return whether there were any."""
        with self._sorting:
            if not self._raw:
                return False
            self._feed(self._raw.popleft())
            return True

    def _feed(self, data: bytes) -> None:
        data = self._rest + data if self._rest else data
        size = np.dtype(self._form.layout.dtype).itemsize
        whole = len(data) - len(data) % size
        self._rest = data[whole:]
        words = np.frombuffer(data, self._form.layout.dtype, whole // size)
        start = 0
        for place, number, opens in _marks(words, self._form.layout):
            self._take(words[start:place])
            self._mark(number, opens)
            start = place + 1
        self._take(words[start:])

    def _take(self, words: Words) -> None:
        """Take words of the open gate; what comes between gates belongs to none."""
        gate, form = self._open, self._form
        if gate is None or not words.size:
            return
        if form.keep:
            times = times_of(words, form.layout, gate.binned.rolled, form.channels)
            if (times[1:] < times[:-1]).any():  # channels of a device may run a few ticks apart
                times.sort(kind="stable")
            if times.size:
                gate.times.append(times)
        gate.binner.sort(words)

    def _mark(self, number: int, opens: bool) -> None:
        gate = self._open
        if opens:
            self._open = Gathered(number, self._binner())
        elif gate is not None and gate.number == number:
            self._open = None
            self._done.append(gate)
            self._came.set()

    def _binner(self) -> Binner:
        form = self._form
        return Binner(form.layout, form.channels, max(form.slices, 1), 0, self.ticks, compiled=True)

    def _error(self, what: str, kind: str) -> DeviceError:
        return DeviceError(what, where=self._where, remedy=CHECK, kind=kind)


def _marks(words: Words, layout: Layout) -> Iterator[tuple[int, int, bool]]:
    """Yield (place, gate, whether it opens) for every mark among words."""
    first = words.dtype.type(layout.special(layout.closed, 0))
    if not words.size or words.max() < first:
        return
    for place in np.flatnonzero(words >= first).tolist():
        word = int(words[place])
        kind = word >> layout.tag_bits & layout.rolled
        if kind in (layout.opened, layout.closed):
            yield place, word & (1 << layout.tag_bits) - 1, kind == layout.opened
