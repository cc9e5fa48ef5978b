"""List mode: a source of event words with a buffer of its own, that marks what it had to throw away.

It knows how many events there should have been, and sends them as fast as they are taken. What does not fit
into its buffer is lost, and a word says how many.
"""

from __future__ import annotations

import socket
import threading
import time

import numpy as np

from daq.devices.events import Layout

FIFO_BYTES = 4 * 1024 * 1024
_PIECE = 64 * 1024
_LOOK_S = 0.002


def example_words(layout: Layout, events: int, per_roll: int, channels: int, seed: int) -> bytes:
    """Return events in the order of their tags, evenly in time, with a roll-over after so many on average."""
    random = np.random.default_rng(seed)
    high = -(-events // per_roll) << layout.tag_bits
    tags = np.sort(random.integers(0, high, events, dtype=np.uint64))
    channel = random.integers(0, channels, events, dtype=np.uint64)
    low = tags & np.uint64((1 << layout.tag_bits) - 1)
    steps = np.diff(tags >> np.uint64(layout.tag_bits), prepend=np.uint64(0)).astype(np.int64)
    at = np.flatnonzero(steps)
    marks = np.array([layout.special(layout.rolled, int(steps[place])) for place in at], dtype=np.uint64)
    words = np.insert(channel << np.uint64(layout.tag_bits) | low, at, marks)
    return words.astype(layout.dtype).tobytes()


class StreamSource:
    """Sends a stretch of words over and over, at a rate, to one client.

    Attributes
    ----------
    sent, lost
        Words that went out, and words that did not fit into the buffer.
    """

    def __init__(self, words: bytes, layout: Layout, rate_hz: float, fifo_bytes: int = FIFO_BYTES) -> None:
        self.sent = self.lost = 0
        self._words, self._layout, self._rate_hz = words, layout, rate_hz
        self._size, self._fifo = layout.bits // 8, fifo_bytes

    def run(self, client: socket.socket, over: threading.Event) -> None:
        """Send until `over` is set; a client that takes nothing fills the buffer, and words are lost."""
        began_s, place = time.monotonic(), 0
        while not over.is_set():
            due = int(self._rate_hz * (time.monotonic() - began_s))
            waiting = due - self.sent - self.lost
            if waiting * self._size > self._fifo:
                self._lose(client, waiting - self._fifo // self._size)
                continue
            if waiting * self._size < _PIECE:
                time.sleep(_LOOK_S)
                continue
            piece = self._words[place : place + _PIECE]
            place = (place + len(piece)) % len(self._words)
            client.sendall(piece)
            self.sent += len(piece) // self._size

    def _lose(self, client: socket.socket, many: int) -> None:
        word = self._layout.special(self._layout.rolled - 1, many)
        client.sendall(word.to_bytes(self._size, "little"))
        self.lost += many
