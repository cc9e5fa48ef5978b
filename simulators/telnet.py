"""Telnet: a serial-to-LAN box that speaks RFC 2217 in front of a simulated instrument.

It agrees to what a client offers and repeats every line setting that it is sent, as a box does that has taken
it; there is no line behind it, so the settings change nothing.

References
----------
.. [1] RFC 854 (Telnet), RFC 856 (binary transmission), RFC 2217 (com port control option).
"""

from __future__ import annotations

from simulators.hosts import Instrument, Send, Session

IAC, SB, SE = 255, 250, 240
WILL, WONT, DO, DONT = 251, 252, 253, 254
COM_PORT_OPTION = 44
SERVER = 100  # what a server adds to the number of a client's command

_BINARY, _SUPPRESS_GO_AHEAD = 0, 3
_AGREED = frozenset({_BINARY, _SUPPRESS_GO_AHEAD, COM_PORT_OPTION})
_ANSWERS = {WILL: (DO, DONT), DO: (WILL, WONT)}


class Rfc2217Box:
    """An instrument behind a box; implements `simulators.hosts.Instrument`."""

    def __init__(self, inner: Instrument) -> None:
        self._inner = inner

    def session(self, send: Send) -> Session:
        """Return a session of the instrument behind the box."""
        return _TelnetSession(self._inner.session(lambda data: send(escaped(data))))


class _TelnetSession:
    def __init__(self, inner: Session) -> None:
        self._inner, self._rest = inner, b""

    def feed(self, data: bytes) -> bytes:
        plain, answers, self._rest = taken_apart(self._rest + data)
        return answers + (escaped(self._inner.feed(plain)) if plain else b"")


def escaped(data: bytes) -> bytes:
    """Return data as they go over Telnet: the byte 255 is doubled."""
    return data.replace(bytes([IAC]), bytes([IAC, IAC]))


def taken_apart(data: bytes) -> tuple[bytes, bytes, bytes]:
    """Return the plain data of a stream, the answers to what was negotiated, and what is not whole yet."""
    plain, answers = b"", b""
    while data:
        before, mark, rest = data.partition(bytes([IAC]))
        plain += before
        if not mark:
            return plain, answers, b""
        size = _size(rest)
        if size is None:
            return plain, answers, mark + rest
        if rest[0] == IAC:
            plain += mark
        else:
            answers += _answer(rest[:size])
        data = rest[size:]
    return plain, answers, b""


def _size(rest: bytes) -> int | None:
    """Return how many bytes behind IAC a command has, or None when they have not all come."""
    if not rest:
        return None
    if rest[0] == SB:
        end = rest.find(bytes([IAC, SE]))
        return None if end < 0 else end + 2
    size = 2 if rest[0] in (WILL, WONT, DO, DONT) else 1
    return size if len(rest) >= size else None


def _answer(command: bytes) -> bytes:
    if command[0] in _ANSWERS:
        agree, refuse = _ANSWERS[command[0]]
        return bytes([IAC, agree if command[1] in _AGREED else refuse, command[1]])
    if command[0] == SB and command[1] == COM_PORT_OPTION:
        return bytes([IAC, SB, COM_PORT_OPTION, command[2] + SERVER]) + command[3:-2] + bytes([IAC, SE])
    return b""
