"""VXI-11: a stand-in that puts a simulated instrument behind the core channel of VXI-11.

References
----------
.. [1] RFC 5531 (ONC RPC, record marking), RFC 4506 (XDR).
.. [2] TCP/IP Instrument Protocol Specification VXI-11, rev. 1.0, sect. B.6 (core channel); from memory.
"""

from __future__ import annotations

import contextlib
import selectors
import socket
import struct
import threading

from daq.ports import Clock
from simulators.hosts import Instrument, Session
from simulators.streams import Channel, Port

CREATE_LINK, WRITE, READ, DESTROY_LINK = 10, 11, 12, 23
END_FLAG, END_REASON = 8, 4
NO_ERROR, IO_TIMEOUT = 0, 15

_MOST_BYTES = 1 << 20
_LAST = 1 << 31


class Vxi11Listener(Port):
    """An instrument behind VXI-11 on a real port of its own, so that no port mapper is asked."""

    def __init__(self, instrument: Instrument, clock: Clock) -> None:
        super().__init__("127.0.0.1", 0)
        self.instrument, self.clock = instrument, clock
        self.address = f"visa:TCPIP::127.0.0.1,{self.number}::inst0::INSTR"

    def channel(self, stream: socket.socket, selector: selectors.BaseSelector) -> Channel:
        """Return what answers a new connection."""
        return _Core(stream, self, selector)


class _Core(Channel):
    """A client's core channel."""

    def __init__(self, stream: socket.socket, port: Vxi11Listener, selector: selectors.BaseSelector) -> None:
        super().__init__(stream, port, selector)
        self._clock = port.clock
        self._rest, self._begun, self._replies = b"", b"", b""
        self._reading: int | None = None  # number of the read that waits for a reply
        self._lock = threading.RLock()  # late replies and timeouts come from other threads
        self._session: Session = port.instrument.session(self._send_late)

    def take(self, data: bytes) -> None:
        """Carry out every call that is whole."""
        self._rest += data
        while call := self._next_call():
            self._obey(call)

    def _next_call(self) -> bytes | None:
        if len(self._rest) < 4:
            return None
        size = struct.unpack(">I", self._rest[:4])[0] & ~_LAST
        if len(self._rest) < 4 + size:
            return None
        call, self._rest = self._rest[4 : 4 + size], self._rest[4 + size :]
        return call

    def _obey(self, call: bytes) -> None:
        number, procedure = struct.unpack(">I16xI", call[:24])
        credentials = 8 + _padded(struct.unpack(">I", call[28:32])[0])
        verifier = 24 + credentials
        size = 8 + _padded(struct.unpack(">I", call[verifier + 4 : verifier + 8])[0])
        self._carry_out(number, procedure, call[verifier + size :])

    def _carry_out(self, number: int, procedure: int, arguments: bytes) -> None:
        if procedure == CREATE_LINK:
            self._answer(number, struct.pack(">IIII", NO_ERROR, 1, 0, _MOST_BYTES))
        elif procedure == WRITE:
            flags, size = struct.unpack(">12xII", arguments[:20])
            self._write(arguments[20 : 20 + size], whole=bool(flags & END_FLAG))
            self._answer(number, struct.pack(">II", NO_ERROR, size))
        elif procedure == READ:
            self._read(number, struct.unpack(">I", arguments[8:12])[0] / 1000)
        else:
            self._answer(number, struct.pack(">I", NO_ERROR))

    def _write(self, data: bytes, *, whole: bool) -> None:
        self._begun += data
        if whole:
            message, self._begun = self._begun, b""
            reply = self._session.feed(message)
            with self._lock:
                self._replies += reply

    def _read(self, number: int, timeout_s: float) -> None:
        with self._lock:
            self._reading = number
            if self._replies:
                self._give()
                return
        clock = self._clock
        clock.call_at(clock.now_ns() + round(timeout_s * 1e9), lambda: self._give_up(number))

    def _give(self) -> None:
        reply, self._replies, number = self._replies, b"", self._reading
        self._reading = None
        padding = bytes(_padded(len(reply)) - len(reply))
        if number is not None:
            self._answer(number, struct.pack(">III", NO_ERROR, END_REASON, len(reply)) + reply + padding)

    def _give_up(self, number: int) -> None:
        with self._lock:
            if self._reading == number:
                self._reading = None
                self._answer(number, struct.pack(">III", IO_TIMEOUT, 0, 0))

    def _send_late(self, data: bytes) -> None:
        with self._lock:
            self._replies += data
            if self._reading is not None:
                self._give()

    def _answer(self, number: int, results: bytes) -> None:
        body = struct.pack(">IIIIII", number, 1, 0, 0, 0, 0) + results
        with self._lock, contextlib.suppress(OSError):
            self._stream.sendall(struct.pack(">I", _LAST | len(body)) + body)


def _padded(size: int) -> int:
    return (size + 3) // 4 * 4
