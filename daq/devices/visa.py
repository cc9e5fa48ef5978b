"""VISA: HiSLIP, VXI-11, USB and GPIB instruments as connections, whatever the library raises as OSError.

``visa:TCPIP::192.168.1.5::hislip0::INSTR``, ``visa:USB::0x1234::5678::SN1::INSTR``, ``visa:GPIB0::5::INSTR``.
A raw TCP socket is no business of VISA's here: its library reads one in pieces of 4096 bytes and never ends
on a dead one, so ``tcp://host:port`` is the address for that.

Notes
-----
The timeouts of the pure-Python back end over VXI-11 are taken from the wall clock: a clock that is set back
by 4 s makes them 4 s longer, one that is set forward by an hour ends them at once. Over HiSLIP they are the
socket's own, and no clock step reaches them.
"""

from __future__ import annotations

import errno
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import pyvisa
from pyvisa.errors import InvalidSession, VisaIOError

_SLICE_S = 0.1  # so long a stop waits at most for a question, where both must take turns


class VisaConnection:
    """An open VISA session.

    A session is not made for two threads: reading and writing take turns, in slices; over HiSLIP, whose two
    directions are independent, a stop is written at once.
    """

    def __init__(self, resource: Any, independent: bool) -> None:
        self._resource, self._independent = resource, independent
        self._closed = False
        self._waiting = b""
        self._asked = False  # reading what nobody asked for returns at once, with nothing
        self._turn, self._ended = threading.Lock(), threading.Event()

    def send(self, data: bytes) -> None:
        """Send one message; raises OSError when the peer is gone."""
        if self._independent:
            return self._write(data)
        with self._turn:
            return self._write(data)

    def recv(self, most: int) -> bytes:
        """Return what has been read; raises BlockingIOError for nothing."""
        self._refuse_when_closed()
        if not self._waiting:
            raise BlockingIOError
        data, self._waiting = self._waiting[:most], self._waiting[most:]
        return data

    def wait_readable(self, timeout_s: float) -> bool:
        """Wait for a message, at most for `timeout_s`; a session that fails raises OSError."""
        if self._waiting or self._closed:
            return True
        if self._independent:
            return self._read(timeout_s)
        left_s = timeout_s
        while not self._closed and left_s > 0:
            with self._turn:
                if self._read(min(left_s, _SLICE_S)):
                    return True
            left_s -= _SLICE_S
        return self._closed

    def close(self) -> None:
        """Let the session go; who reads learns of it at his deadline."""
        self._closed = True
        self._ended.set()
        try:
            with _only_os_errors():
                self._resource.close()
        except OSError:
            return

    def _write(self, data: bytes) -> None:
        with _only_os_errors():
            self._refuse_when_closed()
            self._resource.write_raw(data)
            self._asked = True

    def _read(self, timeout_s: float) -> bool:
        if not self._asked:
            return self._ended.wait(timeout_s)
        try:
            with _only_os_errors():
                self._resource.timeout = max(1, round(1000 * timeout_s))  # never None: that may never return
                self._waiting += self._resource.read_raw()
                self._asked = False
        except TimeoutError:
            return False
        return True

    def _refuse_when_closed(self) -> None:
        if self._closed:
            raise OSError(errno.EBADF, "the session is closed")


def open_visa(address: str, timeout_s: float) -> VisaConnection:
    """Return an open session; raises OSError when there is none."""
    name = address.removeprefix("visa:")
    if name.upper().endswith("SOCKET"):
        raise OSError(errno.EINVAL, "a raw socket is addressed as tcp://host:port, not over VISA")
    with _only_os_errors():
        manager = pyvisa.ResourceManager("@py")
        resource = manager.open_resource(name, open_timeout=round(1000 * timeout_s))
        resource.timeout = round(1000 * timeout_s)
        return VisaConnection(resource, independent="hislip" in name.lower())


@contextmanager
def _only_os_errors() -> Iterator[None]:
    try:
        yield
    except VisaIOError as error:
        if error.error_code == pyvisa.constants.StatusCode.error_timeout:
            raise TimeoutError("no message in time") from error
        raise OSError(errno.EIO, str(error)) from error
    except InvalidSession as error:
        raise OSError(errno.EBADF, "the session is closed") from error
    except OSError:
        raise
    except Exception as error:  # RuntimeError, TypeError, struct.error ...: the session is of no more use
        raise OSError(errno.EIO, f"{type(error).__name__}: {error}") from error
