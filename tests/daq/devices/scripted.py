"""A real simulated instrument that notes what it is sent and whose replies a test may change."""

from __future__ import annotations

from collections.abc import Callable

from simulators.hosts import Instrument, Send, Session


class Scripted:
    """An instrument behind a wire that a test holds.

    Attributes
    ----------
    sent
        Every message that has come, as text.
    change
        Takes message and reply and returns the reply that goes out.
    """

    def __init__(self, inner: Instrument) -> None:
        self.sent: list[str] = []
        self.change: Callable[[str, bytes], bytes] = lambda message, reply: reply
        self._inner = inner

    def session(self, send: Send) -> Session:
        return _ScriptedSession(self, self._inner.session(send))


class _ScriptedSession:
    def __init__(self, scripted: Scripted, inner: Session) -> None:
        self._scripted, self._inner = scripted, inner

    def feed(self, data: bytes) -> bytes:
        message = data.decode().strip()
        self._scripted.sent.append(message)
        return self._scripted.change(message, self._inner.feed(data))
