"""Hosts: give an instrument an address, on a virtual clock (in process or loopback sockets) or a real port.

On a virtual clock a host answers inside the client's `send`. Over TCP the same bytes cross a real pair of
loopback sockets on the way; since both ends are in this process, the number of bytes that are under way is
known exactly, every read asks for bytes that have been sent, and no read can wait for nothing.
"""

from __future__ import annotations

import errno
import socket
from collections.abc import Callable
from typing import Protocol

from daq.ports import Connection
from simulators.clock import VirtualClock

Send = Callable[[bytes], None]

_STALL_S = 10.0  # a loopback socket that does not move for so long is broken: better an error than a hang
_PIECE = 32 * 1024  # below every system's socket buffer, so that writing never waits for reading


class Session(Protocol):
    """An instrument's side of one connection."""

    def feed(self, data: bytes) -> bytes:
        """Take bytes as they come (perhaps half a command) and return the reply bytes for now."""


class Instrument(Protocol):
    """A passive instrument: it acts only when it is fed or when its clock calls it."""

    def session(self, send: Send) -> Session:
        """Return a session for a new connection.

        Parameters
        ----------
        send
            Sends reply bytes later than `feed` returned, from `clock.call_at`; bytes for a connection that
            has ended are dropped.
        """


class Host:
    """An instrument at an address of a virtual clock; it can go away (`close`) and come back (`open`)."""

    def __init__(self, clock: VirtualClock, address: str, instrument: Instrument, transport: str) -> None:
        self._clock, self._address, self._instrument = clock, address, instrument
        self._transport = {"direct": _Line, "tcp": _TcpLine}[transport]
        self._lines: list[_Line] = []

    def open(self) -> None:
        """Answer connections from now on."""
        self._clock.publish(self._address, self._connect)

    def close(self) -> None:
        """End every connection and refuse new ones, as a peer does that dies."""
        self._clock.withdraw(self._address)
        while self._lines:
            self._lines.pop().hang_up()

    def __enter__(self) -> Host:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _connect(self) -> Connection:
        self._lines = [line for line in self._lines if not line.ended]
        line = self._transport(self._clock, self._instrument)
        self._lines.append(line)
        return line


def serve(clock: VirtualClock, address: str, instrument: Instrument, transport: str = "direct") -> Host:
    """Return a host, answering; `transport` is "direct" (in process) or "tcp" (loopback sockets)."""
    host = Host(clock, address, instrument, transport)
    host.open()
    return host


class _Line:
    """One connection in process: the client's end, and the two things the host does with it."""

    def __init__(self, clock: VirtualClock, instrument: Instrument) -> None:
        self._clock, self._lock = clock, clock.lock
        self._inbox = bytearray()  # from the host, not yet on its way to the client
        self._waiting = 0  # bytes that the client can read
        self._closed = False
        self.ended = False
        self._session = instrument.session(self.post)

    def send(self, data: bytes) -> None:
        with self._lock:
            self._refuse_when_closed()
            if self.ended:
                raise BrokenPipeError(errno.EPIPE, "the host has gone")
            self._put(self._session.feed(self._carry(data)))

    def recv(self, most: int) -> bytes:
        with self._lock:
            self._refuse_when_closed()
            if self._waiting:
                return self._take(min(most, self._waiting))
            if self.ended:
                return b""
            raise BlockingIOError(errno.EAGAIN, "nothing is waiting")

    def close(self) -> None:
        with self._lock:
            self._closed = True
            self.hang_up()

    def readable(self) -> bool:
        return self._waiting > 0 or self.ended

    def post(self, data: bytes) -> None:
        """Send bytes to the client."""
        with self._lock:
            self._put(data)

    def hang_up(self) -> None:
        """End the connection from the host's side."""
        with self._lock:
            self.ended = True
            self._clock.wake()

    def _put(self, data: bytes) -> None:
        if data and not self.ended:
            self._inbox += data
            self._fill()
            self._clock.wake()

    def _carry(self, data: bytes) -> bytes:
        return data

    def _fill(self) -> None:
        self._waiting = len(self._inbox)

    def _take(self, size: int) -> bytes:
        taken = bytes(self._inbox[:size])
        del self._inbox[:size]
        self._waiting -= size
        return taken

    def _refuse_when_closed(self) -> None:
        if self._closed:
            raise OSError(errno.EBADF, "the connection is closed")


class _TcpLine(_Line):
    """One connection whose bytes cross a pair of loopback sockets."""

    def __init__(self, clock: VirtualClock, instrument: Instrument) -> None:
        self._client, self._server = _socket_pair()
        super().__init__(clock, instrument)

    def hang_up(self) -> None:
        with self._lock:
            super().hang_up()
            self._server.close()
            if self._closed:
                self._client.close()

    def _carry(self, data: bytes) -> bytes:
        arrived = b""
        for at in range(0, len(data), _PIECE):
            piece = data[at : at + _PIECE]
            self._client.sendall(piece)
            arrived += _read_exactly(self._server, len(piece))
        return arrived

    def _fill(self) -> None:
        piece = self._inbox[: _PIECE - self._waiting]
        if piece and not self.ended:
            self._server.sendall(piece)
            self._waiting += len(piece)
            del self._inbox[: len(piece)]

    def _take(self, size: int) -> bytes:
        taken = _read_exactly(self._client, size)
        self._waiting -= size
        self._fill()
        return taken


def _socket_pair() -> tuple[socket.socket, socket.socket]:
    # socket.socketpair would not be TCP on every system, and TCP is what is to be rehearsed.
    with socket.create_server(("127.0.0.1", 0)) as listener:
        listener.settimeout(_STALL_S)
        client = socket.create_connection(listener.getsockname(), _STALL_S)
        server, peer = listener.accept()
        while peer != client.getsockname():  # somebody else on this machine was quicker
            server.close()
            server, peer = listener.accept()
    for end in (client, server):
        end.settimeout(_STALL_S)
        end.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
    return client, server


def _read_exactly(end: socket.socket, size: int) -> bytes:
    data = end.recv(size)
    while len(data) < size:
        more = end.recv(size - len(data))
        if not more:
            raise ConnectionResetError(
                errno.ECONNRESET, "the connection broke between two of our own sockets"
            )
        data += more
    return data
