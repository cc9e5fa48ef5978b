"""Stream: list-mode words over TCP, kept and counted as they come, memory flat however long the gate."""

from __future__ import annotations

import socket
import threading
from collections.abc import Callable
from queue import Queue

from daq.devices.events import Binner
from daq.devices.lines import CHECK
from daq.errors import DeviceError

CHUNK = 256 * 1024  # larger ones do not fit the caches, and are slower
_LOOK_S = 0.1
_AHEAD = 256  # chunks, 64 MB at most


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
    chunks: Queue[bytes | OSError] = Queue(_AHEAD)
    reader = threading.Thread(target=_read, args=(stream, chunks, over), daemon=True)
    reader.start()
    many = 0
    while chunk := chunks.get():
        if isinstance(chunk, OSError):
            raise DeviceError(f"link lost: {chunk}", where=where, remedy=CHECK, kind="lost") from chunk
        keep(chunk)
        binner.feed(chunk)
        many += len(chunk)
    reader.join()
    return many


def _read(stream: socket.socket, chunks: Queue[bytes | OSError], over: threading.Event) -> None:
    """Take what comes, ahead of a disk that is slow for a moment; an empty chunk is the end."""
    stream.settimeout(_LOOK_S)
    buffer = bytearray(CHUNK)
    view = memoryview(buffer)
    while not over.is_set():
        try:
            size = stream.recv_into(buffer)
        except TimeoutError:
            continue
        except OSError as error:
            chunks.put(error)
            return
        if not size:
            break
        chunks.put(bytes(view[:size]))
    chunks.put(b"")
