"""Stream: list-mode words over TCP, kept and counted as they come, memory flat however long the gate."""

from __future__ import annotations

import socket
import threading
from collections.abc import Callable

from daq.devices.events import Binner
from daq.devices.lines import CHECK
from daq.errors import DeviceError

CHUNK = 256 * 1024  # larger ones do not fit the caches, and are slower
_LOOK_S = 0.1


def pump(
    stream: socket.socket,
    binner: Binner,
    keep: Callable[[bytes], None],
    over: threading.Event,
    where: str = "stream",
) -> int:
    """Return how many bytes have come until `over` is set or the stream ends.

    Parameters
    ----------
    stream
        A connected socket; it is given a timeout.
    binner
        Counts the words.
    keep
        Takes every chunk before it is counted: the journal (`Sink.append_events`).
    over
        Ends the pump, at the latest a tenth of a second later.
    where
        For messages.

    Raises
    ------
    DeviceError
        "lost" when the connection breaks.
    """
    # One thread: a second one that only reads waits for this one at every chunk, many times slower.
    stream.settimeout(_LOOK_S)
    buffer, many = bytearray(CHUNK), 0
    view = memoryview(buffer)
    while not over.is_set():
        try:
            size = stream.recv_into(buffer)
        except TimeoutError:
            continue
        except OSError as error:
            raise DeviceError(f"link lost: {error}", where=where, remedy=CHECK, kind="lost") from error
        if not size:
            break
        chunk = bytes(view[:size])
        keep(chunk)
        binner.feed(chunk)
        many += size
    return many
