"""Serial ports, local and over the net, as connections that hold nobody and raise OSError only.

``serial:/dev/ttyUSB0?baud=115200&parity=E&bits=7&stop=2``, ``socket://host:port`` (a serial-to-LAN box that
passes bytes on), ``rfc2217://host:port`` (one that takes line settings too).
"""

from __future__ import annotations

import errno
import threading
import time
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, cast
from urllib.parse import parse_qsl

import serial

# A waiting reader looks so often whether its time is over or somebody has closed the port. It never changes:
# over RFC 2217 a new timeout sends every line setting anew.
_LOOK_S = 0.02
_KEYS = {"baud": "baudrate", "bits": "bytesize", "parity": "parity", "stop": "stopbits"}


class SerialConnection:
    """An open serial port.

    Notes
    -----
    What the library raises when a peer has died, or when another thread closes the port, depends on the kind
    of port (bare termios.error, TypeError, AttributeError ...); all of it leaves here as OSError.
    """

    def __init__(self, port: Any) -> None:
        self._port, self._closed = port, False
        self._begun, self._lost = b"", cast(OSError | None, None)
        self._reading, self._writing = threading.Lock(), threading.Lock()

    def send(self, data: bytes) -> None:
        """Send all bytes; raises OSError when the peer is gone."""
        with self._writing, _only_os_errors():
            self._refuse_when_closed()
            self._port.write(data)

    def recv(self, most: int) -> bytes:
        """Return what is waiting; raises BlockingIOError for nothing, OSError when the peer is gone."""
        with self._reading, _only_os_errors():
            self._refuse_when_closed()
            data, self._begun = self._begun, b""
            while len(data) < most and (waiting := self._port.in_waiting):  # socket:// says 1 for any number
                data += self._port.read(min(waiting, most - len(data)))
        if data:
            return data
        if self._lost is not None:
            raise self._lost
        raise BlockingIOError

    def wait_readable(self, timeout_s: float) -> bool:
        """Wait until bytes can be read, or `recv` would raise; for `timeout_s` at most, and a look more."""
        until_s = time.monotonic() + timeout_s
        while not (self._begun or self._closed or self._lost):
            try:
                with self._reading, _only_os_errors():
                    self._begun = self._port.read(1)
            except OSError as error:
                self._lost = error  # recv says so, behind the last bytes
            if not self._begun and self._lost is None and time.monotonic() >= until_s:
                return False
        return True

    def close(self) -> None:
        """Let the port go, from any thread."""
        self._closed = True
        with self._reading, self._writing:
            try:
                with _only_os_errors():
                    self._port.close()
            except OSError:
                return

    def _refuse_when_closed(self) -> None:
        if self._closed:
            raise OSError(errno.EBADF, "the port is closed")


def open_serial(address: str, timeout_s: float) -> SerialConnection:
    """Return an open port; raises OSError when there is none or nobody answers."""
    place, _, settings = address.removeprefix("serial:").partition("?")
    options: dict[str, Any] = {_KEYS[key]: _value(text) for key, text in parse_qsl(settings) if key in _KEYS}
    if address.startswith("serial:"):
        options["write_timeout"] = timeout_s
    with _only_os_errors(), warnings.catch_warnings():
        warnings.simplefilter("ignore", DeprecationWarning)  # the library's own, of its thread
        port = serial.serial_for_url(place, timeout=_LOOK_S, **options)
        return SerialConnection(port)


def _value(text: str) -> int | str:
    return int(text) if text.isdigit() else text


@contextmanager
def _only_os_errors() -> Iterator[None]:
    try:
        yield
    except OSError:
        raise
    except Exception as error:  # the library's own, whatever its kind: the port is of no more use
        raise OSError(errno.EIO, f"{type(error).__name__}: {error}") from error
