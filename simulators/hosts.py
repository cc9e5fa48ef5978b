"""Hosts: give an instrument an address, on a virtual clock (in process or over sockets) or a real port."""

from __future__ import annotations

import contextlib
import selectors
import socket
import threading
from collections.abc import Callable, Sequence
from typing import Protocol
from urllib.parse import urlsplit

from daq.ports import Connection
from simulators.clock import VirtualClock
from simulators.connections import DirectConnection, TcpConnection
from simulators.streams import Channel, Port

Send = Callable[[bytes], None]

_LOOK_S = 0.1  # how often a real host looks whether it shall stop


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
        self._transport = {"direct": DirectConnection, "tcp": TcpConnection}[transport]
        self._connections: list[DirectConnection] = []

    def open(self) -> None:
        """Answer connections from now on."""
        self._clock.publish(self._address, self._connect)

    def close(self) -> None:
        """End every connection and refuse new ones, as a peer does that dies."""
        self._clock.withdraw(self._address)
        while self._connections:
            self._connections.pop().hang_up()

    def __enter__(self) -> Host:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _connect(self) -> Connection:
        self._connections = [connection for connection in self._connections if not connection.ended]
        connection = self._transport(self._clock, lambda send: self._instrument.session(send).feed)
        self._connections.append(connection)
        return connection


def serve(clock: VirtualClock, address: str, instrument: Instrument, transport: str = "direct") -> Host:
    """Return a host, answering; `transport` is "direct" (in process) or "tcp" (loopback sockets)."""
    host = Host(clock, address, instrument, transport)
    host.open()
    return host


class Listener(Port):
    """An instrument that listens on a real TCP port; `run_real` answers.

    Attributes
    ----------
    address
        "tcp://host:port" with the port that it really has.
    """

    def __init__(self, address: str, instrument: Instrument, scheme: str = "tcp") -> None:
        place = urlsplit(address)
        super().__init__(place.hostname or "", place.port or 0)
        self.instrument = instrument
        self.address = f"{scheme}://{place.hostname}:{self.number}"

    def channel(self, stream: socket.socket, selector: selectors.BaseSelector) -> Channel:
        """Return what answers a new connection."""
        return _Answer(stream, self, selector)


class Listening(Protocol):
    """An instrument at a real address."""

    def begin(self, selector: selectors.BaseSelector) -> None:
        """Let a selector call us when there is something to do."""

    def let_go(self) -> None:
        """Let the port go."""


def run_real(listeners: Sequence[Listening], stop: threading.Event) -> None:
    """Answer on real ports until `stop` is set, then let the ports go."""
    with contextlib.ExitStack() as stack:
        selector = stack.enter_context(selectors.DefaultSelector())
        for listener in listeners:
            stack.callback(listener.let_go)
        stack.callback(_end_all, selector)
        for listener in listeners:
            listener.begin(selector)
        while not stop.is_set():
            for key, _ in selector.select(_LOOK_S):
                key.data()
            for key in list(selector.get_map().values()):
                key.data.end_when_down()


class _Answer(Channel):
    """Feeds an instrument, and sends what it answers, at once or later."""

    def __init__(self, stream: socket.socket, port: Listener, selector: selectors.BaseSelector) -> None:
        super().__init__(stream, port, selector)
        self._writing = threading.Lock()
        self._session = port.instrument.session(self._send_late)

    def take(self, data: bytes) -> None:
        """Answer what has come."""
        self._send(self._session.feed(data))

    def _send(self, data: bytes) -> None:
        with self._writing:
            self._stream.sendall(data)

    def _send_late(self, data: bytes) -> None:
        with contextlib.suppress(OSError):  # the connection has ended: dropped
            self._send(data)


def _end_all(selector: selectors.BaseSelector) -> None:
    for key in list(selector.get_map().values()):
        if isinstance(key.data, Channel):
            key.data.end()
