"""HiSLIP: a stand-in that puts a simulated instrument behind HiSLIP 1.0 in synchronised mode.

References
----------
.. [1] IVI-6.1, High-Speed LAN Instrument Protocol, rev. 1.0, tables 3 and 4 (message header and types); from
   memory.
"""

from __future__ import annotations

import contextlib
import selectors
import socket
import struct
from collections import deque
from urllib.parse import urlsplit

from simulators.hosts import Instrument, Session
from simulators.streams import Channel, Port

_HEADER = struct.Struct(">2sBBIQ")
_VERSION = 0x0100
_MOST_BYTES = 1 << 20

INITIALIZE, INITIALIZE_RESPONSE = 0, 1
DATA, DATA_END = 6, 7
DEVICE_CLEAR_COMPLETE, DEVICE_CLEAR_ACKNOWLEDGE = 8, 9
MAXIMUM_SIZE, MAXIMUM_SIZE_RESPONSE = 15, 16
ASYNC_INITIALIZE, ASYNC_INITIALIZE_RESPONSE = 17, 18
ASYNC_CLEAR, STATUS_QUERY, STATUS_RESPONSE, ASYNC_CLEAR_ACKNOWLEDGE = 19, 21, 22, 23

_PLAIN_ANSWERS = {
    DEVICE_CLEAR_COMPLETE: DEVICE_CLEAR_ACKNOWLEDGE,
    ASYNC_INITIALIZE: ASYNC_INITIALIZE_RESPONSE,
    ASYNC_CLEAR: ASYNC_CLEAR_ACKNOWLEDGE,
    STATUS_QUERY: STATUS_RESPONSE,
}


def message(kind: int, control: int, parameter: int, payload: bytes = b"") -> bytes:
    """Return a HiSLIP message."""
    return _HEADER.pack(b"HS", kind, control, parameter, len(payload)) + payload


def messages(data: bytes) -> tuple[list[tuple[int, int, bytes]], bytes]:
    """Return the whole messages of a stream as (type, parameter, payload), and what is left."""
    found = []
    while len(data) >= _HEADER.size:
        _, kind, _, parameter, size = _HEADER.unpack(data[: _HEADER.size])
        end = _HEADER.size + size
        if len(data) < end:
            break
        found.append((kind, parameter, data[_HEADER.size : end]))
        data = data[end:]
    return found, data


class HislipListener(Port):
    """An instrument behind HiSLIP on a real port; `address` is what a rig file says.

    A reply carries the number of the message that it answers, so that a late one is nobody else's. A client
    makes two connections, one for messages and one for what goes past them.
    """

    def __init__(self, instrument: Instrument, port: int = 0) -> None:
        super().__init__("127.0.0.1", port)
        self.instrument = instrument
        self.address = f"visa:TCPIP::127.0.0.1::hislip0,{self.number}::INSTR"

    def channel(self, stream: socket.socket, selector: selectors.BaseSelector) -> Channel:
        """Return what answers a new connection."""
        return _Channel(stream, self, selector)


class _Channel(Channel):
    """One of a client's connections."""

    def __init__(self, stream: socket.socket, port: HislipListener, selector: selectors.BaseSelector) -> None:
        super().__init__(stream, port, selector)
        self._rest, self._begun = b"", b""
        self._owed: deque[int] = deque()
        self._session: Session = port.instrument.session(self._send_late)

    def take(self, data: bytes) -> None:
        """Answer every message that is whole."""
        found, self._rest = messages(self._rest + data)
        for kind, parameter, payload in found:
            self._stream.sendall(self._answer(kind, parameter, payload))

    def _answer(self, kind: int, parameter: int, payload: bytes) -> bytes:
        if kind == INITIALIZE:
            return message(INITIALIZE_RESPONSE, 0, _VERSION << 16 | 1)
        if kind == MAXIMUM_SIZE:
            return message(MAXIMUM_SIZE_RESPONSE, 0, 0, struct.pack(">Q", _MOST_BYTES))
        if kind in _PLAIN_ANSWERS:
            return message(_PLAIN_ANSWERS[kind], 0, 0)
        self._begun += payload
        if kind != DATA_END:
            return b""
        whole, self._begun = self._begun, b""
        reply = self._session.feed(whole)
        if not reply:
            self._owed.append(parameter)
        return message(DATA_END, 0, parameter, reply) if reply else b""

    def _send_late(self, data: bytes) -> None:
        number = self._owed.popleft() if self._owed else 0
        with contextlib.suppress(OSError):
            self._stream.sendall(message(DATA_END, 0, number, data))


def host_port(address: str) -> tuple[str, int]:
    """Return host and port of a HiSLIP address of a rig file."""
    fields = address.removeprefix("visa:").split("::")
    place = urlsplit(f"//{fields[1]}:{fields[2].partition(',')[2] or 4880}")
    return place.hostname or "", place.port or 0
