"""Streams: a real TCP port that takes connections, and a connection that is called when bytes have come."""

from __future__ import annotations

import contextlib
import selectors
import socket
from abc import ABC, abstractmethod

_STALL_S = 10.0  # a client that takes no bytes for so long is dropped
_CHUNK = 65536


class Port(ABC):
    """A listening TCP port, from construction on; a port 0 is replaced by a free one.

    It can go away (`close`) and come back (`open`): meanwhile connections are ended as they come.
    """

    def __init__(self, host: str, port: int) -> None:
        self.socket = socket.create_server((host, port))
        self.socket.setblocking(False)
        self.number: int = self.socket.getsockname()[1]
        self.down = False

    @abstractmethod
    def channel(self, stream: socket.socket, selector: selectors.BaseSelector) -> Channel:
        """Return what answers a new connection."""

    def open(self) -> None:
        """Answer connections from now on."""
        self.down = False

    def close(self) -> None:
        """End every connection, and new ones as they come."""
        self.down = True

    def begin(self, selector: selectors.BaseSelector) -> None:
        """Let a selector call us when somebody connects."""
        self._selector = selector
        selector.register(self.socket, selectors.EVENT_READ, self)

    def __call__(self) -> None:
        """Take a connection, unless the client has gone already."""
        with contextlib.suppress(OSError):
            stream, _ = self.socket.accept()
            stream.settimeout(_STALL_S)
            stream.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            self._selector.register(stream, selectors.EVENT_READ, self.channel(stream, self._selector))

    def end_when_down(self) -> None:  # noqa: B027 - what a channel does, a port need not
        """Stay: somebody has to end the connections that come."""

    def let_go(self) -> None:
        """Let the port go."""
        self.socket.close()


class Channel(ABC):
    """A connection to a port; called when bytes have come, it ends itself when the client has."""

    def __init__(self, stream: socket.socket, port: Port, selector: selectors.BaseSelector) -> None:
        self._stream, self._port, self._selector = stream, port, selector

    @abstractmethod
    def take(self, data: bytes) -> None:
        """Take what has come and answer it; an OSError ends the connection."""

    def __call__(self) -> None:
        """Read, and answer or end."""
        try:
            data = self._stream.recv(_CHUNK)
            if data:
                self.take(data)
        except OSError:
            data = b""
        if not data:
            self.end()

    def end_when_down(self) -> None:
        """End the connection when the port has gone away."""
        if self._port.down:
            self.end()

    def end(self) -> None:
        """End the connection."""
        self._selector.unregister(self._stream)
        self._stream.close()
