"""Connections on a virtual clock: in process, or over a real pair of loopback sockets.

A host answers inside the client's `send`, under the clock's lock. Over TCP the same bytes cross two sockets
on the way; both ends are in this process, so the number of bytes under way is known exactly: every read
asks for bytes that have been sent, and nobody waits for nothing.
"""

from __future__ import annotations

import errno
import socket
from collections.abc import Callable

from simulators.clock import VirtualClock

Begin = Callable[[Callable[[bytes], None]], Callable[[bytes], bytes]]

_STALL_S = 10.0  # a loopback socket that does not move for so long is broken: better an error than a hang
_PIECE = 32 * 1024  # below every system's socket buffer, so that writing never waits for reading


class DirectConnection:
    """A connection in process: the client's end, and what the host does with it.

    Parameters
    ----------
    clock
        The clock that its host lives on.
    begin
        Takes what sends bytes to the client, gives what answers the client's bytes.
    """

    def __init__(self, clock: VirtualClock, begin: Begin) -> None:
        self._clock, self._lock = clock, clock.lock
        self._inbox = bytearray()  # from the host, not yet on its way to the client
        self._waiting = 0  # bytes that the client can read
        self._closed = False
        self.ended = False
        self._feed = begin(self.post)

    def send(self, data: bytes) -> None:
        """Send all bytes and have them answered; raises OSError when the host has gone."""
        with self._lock:
            self._refuse_when_closed()
            if self.ended:
                raise BrokenPipeError(errno.EPIPE, "the host has gone")
            self._put(self._feed(self._carry(data)))

    def recv(self, most: int) -> bytes:
        """Return what is waiting; raises BlockingIOError for nothing, b"" is the end of the stream."""
        with self._lock:
            self._refuse_when_closed()
            if self._waiting:
                return self._take(min(most, self._waiting))
            if self.ended:
                return b""
            raise BlockingIOError

    def close(self) -> None:
        """End the connection from the client's side."""
        with self._lock:
            self._closed = True
            self.hang_up()

    def readable(self) -> bool:
        """Return whether `recv` would give bytes or the end of the stream."""
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


class TcpConnection(DirectConnection):
    """A connection whose bytes cross a pair of loopback sockets; what waits for room dies with its host."""

    def __init__(self, clock: VirtualClock, begin: Begin) -> None:
        self._client, self._server = _socket_pair()
        super().__init__(clock, begin)

    def hang_up(self) -> None:
        """End the connection from the host's side."""
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
