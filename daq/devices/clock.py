"""The real clock: monotonic run time, UTC stamps, waits that really wait, TCP connections."""

from __future__ import annotations

import contextlib
import errno
import selectors
import socket
import threading
import time
from collections.abc import Callable
from typing import Protocol, cast
from urllib.parse import urlsplit

from daq.ports import Connection, Signal


class RealClock:
    """A run clock on the machine's monotonic clock, which no clock step can move.

    Parameters
    ----------
    start_ns
        Run time now: 0 for a new run, later for one that goes on after a break.
    """

    kind = "real"

    def __init__(self, start_ns: int = 0) -> None:
        self._zero_ns = time.monotonic_ns() - start_ns

    def now_ns(self) -> int:
        """Return the run time [ns]."""
        return time.monotonic_ns() - self._zero_ns

    def utc_ns(self) -> int:
        """Return UTC as nanoseconds since 1970-01-01, from the machine's settable clock."""
        return time.time_ns()

    def sleep_until(self, at_ns: int) -> None:
        """Return when the run time has reached `at_ns`."""
        while (left_ns := at_ns - self.now_ns()) > 0:
            time.sleep(left_ns * 1e-9)

    def event(self) -> Signal:
        """Return a new flag."""
        return _RealSignal(self)

    def call_at(self, at_ns: int, function: Callable[[], None]) -> None:
        """Call a short function once, in a thread of its own, when the run time reaches `at_ns`."""
        timer = threading.Timer(self.left_s(at_ns), function)
        timer.daemon = True  # what was to come later does not keep the program alive
        timer.start()

    def wait_readable(self, connection: Connection, until_ns: int) -> bool:
        """Wait until bytes (or the end of the stream) can be read, at most until `until_ns`."""
        return cast(_Waits, connection).wait_readable(self.left_s(until_ns))

    def connect(self, address: str, timeout_s: float) -> Connection:
        """Open a byte stream to an address of a rig file; raises OSError when nobody answers in time."""
        scheme = address.partition(":")[0]
        if scheme in ("serial", "socket", "rfc2217"):
            from daq.devices.serials import open_serial

            return open_serial(address, timeout_s)
        if scheme == "visa":
            from daq.devices.visa import open_visa

            return open_visa(address, timeout_s)
        place = urlsplit(address)
        stream = socket.create_connection((place.hostname or "", place.port or 0), timeout_s)
        return _RealConnection(stream, timeout_s)

    def left_s(self, until_ns: int) -> float:
        """Return how long it is until a run time [s], 0 when it has passed."""
        return min(max(0, until_ns - self.now_ns()) * 1e-9, threading.TIMEOUT_MAX)


class _Waits(Protocol):
    """A connection on the real clock."""

    def wait_readable(self, timeout_s: float) -> bool: ...


class _RealSignal:
    """A flag on the real clock."""

    def __init__(self, clock: RealClock) -> None:
        self._clock, self._flag = clock, threading.Event()

    def set(self) -> None:
        self._flag.set()

    def clear(self) -> None:
        self._flag.clear()

    def is_set(self) -> bool:
        return self._flag.is_set()

    def wait_until(self, at_ns: int) -> bool:
        return self._flag.wait(self._clock.left_s(at_ns))


class _RealConnection:
    """A TCP connection that never waits longer than it was told."""

    def __init__(self, stream: socket.socket, timeout_s: float) -> None:
        stream.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
        stream.setblocking(False)
        self._stream, self._timeout_s, self._closed = stream, timeout_s, False
        self._selector, self._reading = selectors.DefaultSelector(), threading.Lock()
        self._selector.register(stream, selectors.EVENT_READ)

    def send(self, data: bytes) -> None:
        rest = memoryview(data)
        while rest:
            try:
                rest = rest[self._stream.send(rest) :]
            except BlockingIOError as error:
                if not self._wait_writable():
                    raise TimeoutError("the device takes no more bytes") from error

    def recv(self, most: int) -> bytes:
        if self._closed:
            raise OSError(errno.EBADF, "the connection is closed")
        return self._stream.recv(most)

    def wait_readable(self, timeout_s: float) -> bool:
        # A stream that another thread has closed can be "read": recv says so with an OSError.
        with self._reading:
            return self._closed or bool(self._selector.select(timeout_s))

    def close(self) -> None:
        self._closed = True
        with contextlib.suppress(OSError):
            self._stream.shutdown(socket.SHUT_RDWR)  # wakes whoever waits ...
        with self._reading:  # ... but only as long as the stream is open: a closed one wakes nobody
            self._selector.close()
            self._stream.close()

    def _wait_writable(self) -> bool:
        with selectors.DefaultSelector() as selector:
            selector.register(self._stream, selectors.EVENT_WRITE)
            return bool(selector.select(self._timeout_s))
