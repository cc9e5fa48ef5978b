"""Ports: an instrument at a real address of any kind, a TCP port, a serial port or an RFC 2217 box."""

from __future__ import annotations

import contextlib
import os
import selectors
import threading
from pathlib import Path

from simulators.hosts import Instrument, Listener
from simulators.telnet import Rfc2217Box

_CHUNK = 4096


class PtyListener:
    """An instrument on a serial port: the address's path is made to lead to a pseudo-terminal (POSIX)."""

    def __init__(self, address: str, instrument: Instrument) -> None:
        import tty  # not on every system

        self._master, self._slave = os.openpty()
        tty.setraw(self._slave)
        self._link = Path(address.removeprefix("serial:").partition("?")[0])
        self._link.symlink_to(os.ttyname(self._slave))
        self.address, self.down = address, False
        self._writing = threading.Lock()
        self._session = instrument.session(self._send)

    def open(self) -> None:
        """Answer from now on."""
        self.down = False

    def close(self) -> None:
        """Take bytes and answer nothing: a serial line has no connection that could end."""
        self.down = True

    def begin(self, selector: selectors.BaseSelector) -> None:
        """Let a selector call us when bytes have come."""
        selector.register(self._master, selectors.EVENT_READ, self)

    def __call__(self) -> None:
        """Answer what has come."""
        data = os.read(self._master, _CHUNK)
        if not self.down:
            self._send(self._session.feed(data))

    def end_when_down(self) -> None:
        """Stay: there is no connection to end."""

    def let_go(self) -> None:
        """Remove the port."""
        self._link.unlink(missing_ok=True)
        for handle in (self._master, self._slave):
            with contextlib.suppress(OSError):
                os.close(handle)

    def _send(self, data: bytes) -> None:
        with self._writing, contextlib.suppress(OSError):
            os.write(self._master, data)


def listen(address: str, instrument: Instrument) -> Listener | PtyListener:
    """Return what listens at an address of a rig file; raises OSError when it is taken."""
    scheme, _, place = address.partition(":")
    if scheme == "serial":
        return PtyListener(address, instrument)
    if scheme == "rfc2217":
        return Listener(f"tcp:{place}", Rfc2217Box(instrument), scheme)
    return Listener(f"tcp:{place}", instrument, scheme)
