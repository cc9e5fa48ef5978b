"""Events: list-mode words become counts by channel and slice, in plain numpy, or compiled where numba is.

==========  ================================================================================================
word        bits
==========  ================================================================================================
32 bits     31: special; 30-25: channel; 24-0: tag. Special: 63 the tag counter has rolled over (tag: how
            often), 62 events were lost (tag: how many)
64 bits     63: special; 62-56: channel; 55-0: tag. Special: 127 rolled over, 126 lost
==========  ================================================================================================

Little-endian; the tag counts ticks and is continued over roll-overs, so that a time is known however long the
run. The layout is this program's own.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache
from importlib import import_module
from importlib.util import find_spec
from typing import Any

import numpy as np
from numpy.typing import NDArray

Words = NDArray[np.unsignedinteger[Any]]
Counts = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Layout:
    """Where channel and tag stand in a word."""

    dtype: str
    bits: int
    tag_bits: int
    channel_bits: int

    @property
    def rolled(self) -> int:
        """The special number of a roll-over; the one below it marks losses."""
        return (1 << self.channel_bits) - 1

    def event(self, channel: int, tag: int) -> int:
        """Return the word of an event."""
        return channel << self.tag_bits | tag & (1 << self.tag_bits) - 1

    def special(self, number: int, tag: int) -> int:
        """Return the word of a roll-over or a loss."""
        return 1 << (self.bits - 1) | self.event(number, tag)


U32, U64 = Layout("<u4", 32, 25, 6), Layout("<u8", 64, 56, 7)


@dataclass(slots=True)
class Binned:
    """What a gate holds so far: counts (slice, channel), events before and behind the slices, losses."""

    counts: Counts
    outside: int = 0
    lost: int = 0
    rolled: int = 0  # roll-overs so far: the high part of every tag


class Binner:
    """Sorts the words of one gate into slices of equal length; half a word waits for the next chunk.

    Parameters
    ----------
    layout
        `U32` or `U64`.
    channels, slices
        How many.
    first_tick, ticks
        When the gate opens, and how long a slice is, in ticks of the device.
    compiled
        Whether numba does the work, if it is there.
    """

    def __init__(
        self, layout: Layout, channels: int, slices: int, first_tick: int, ticks: int, compiled: bool = False
    ) -> None:
        self.binned = Binned(np.zeros((slices, channels), dtype=np.int64))
        self._layout, self._first_tick, self._ticks = layout, first_tick, ticks
        self._rest = b""
        self._sort = _compiled() if compiled and find_spec("numba") else sort_words

    def feed(self, chunk: bytes) -> None:
        """Take bytes as they come."""
        data = self._rest + chunk if self._rest else chunk
        size = np.dtype(self._layout.dtype).itemsize
        whole = len(data) - len(data) % size
        self._rest = bytes(data[whole:])
        self._sort(
            np.frombuffer(data, self._layout.dtype, whole // size),
            self.binned,
            self._layout,
            self._first_tick,
            self._ticks,
        )


Sort = Callable[[Words, Binned, Layout, int, int], None]


def sort_words(words: Words, binned: Binned, layout: Layout, first_tick: int, ticks: int) -> None:
    """Add words to what is binned: cut at the special words, each stretch between them at once."""
    special = np.flatnonzero(words >> np.array(layout.bits - 1, words.dtype))
    mask = (1 << layout.tag_bits) - 1
    start = 0
    for place in special.tolist():
        _add(words[start:place], binned, layout, first_tick, ticks)
        word = int(words[place])
        number, tag = word >> layout.tag_bits & layout.rolled, word & mask
        if number == layout.rolled:
            binned.rolled += tag
        elif number == layout.rolled - 1:
            binned.lost += tag
        start = place + 1
    _add(words[start:], binned, layout, first_tick, ticks)


def _add(words: Words, binned: Binned, layout: Layout, first_tick: int, ticks: int) -> None:
    """Add a stretch of events without a roll-over: one histogram of (slice, channel)."""
    if not words.size:
        return
    slices, channels = binned.counts.shape
    base = (binned.rolled << layout.tag_bits) - first_tick
    kind: Any = np.int64 if layout.bits == 64 or ticks.bit_length() > layout.tag_bits else np.int32
    tags: NDArray[Any] = (words & words.dtype.type((1 << layout.tag_bits) - 1)).astype(kind)
    # the slice of a tag, with the part that all of them share taken out so that it fits a small integer
    shared, offset = divmod(base, ticks)
    place = (tags + kind(offset)) // kind(ticks) + kind(np.clip(shared, -(2**30), 2**30))
    channel: NDArray[Any] = (words >> words.dtype.type(layout.tag_bits)).astype(kind)
    good = (place >= 0) & (place < slices) & (channel < channels)
    if not good.all():
        binned.outside += int(good.size - np.count_nonzero(good))
        place, channel = place[good], channel[good]
    flat = np.bincount(place * kind(channels) + channel, minlength=slices * channels)
    binned.counts += flat.reshape(slices, channels)


@cache  # compiling takes a third of a second
def _compiled() -> Sort:
    numba: Any = import_module("numba")
    loop = numba.njit(nogil=True)(count_words)

    def sort(words: Words, binned: Binned, layout: Layout, first_tick: int, ticks: int) -> None:
        outside, lost, binned.rolled = loop(
            words,
            binned.counts,
            layout.bits,
            layout.tag_bits,
            layout.rolled,
            binned.rolled,
            first_tick,
            ticks,
        )
        binned.outside, binned.lost = binned.outside + outside, binned.lost + lost

    return sort


def count_words(
    words: Any, counts: Any, bits: int, tag_bits: int, mark: int, rolled: int, first_tick: int, ticks: int
) -> tuple[int, int, int]:
    """Add words to counts one by one and return (events outside, lost, roll-overs): the rule, for a compiler.

    Events come nearly in order, so the slice of the last one is tried before anything is divided.
    """
    outside, lost, mask, top = 0, 0, (1 << tag_bits) - 1, 1 << (bits - 1)
    slices, channels = counts.shape
    base, place, low = (rolled << tag_bits) - first_tick, 0, 0
    for at in range(words.size):
        word = int(words[at])
        number = (word >> tag_bits) & mark
        if word & top:
            if number == mark:
                rolled += word & mask
                base = (rolled << tag_bits) - first_tick
            elif number == mark - 1:
                lost += word & mask
            continue
        since = base + (word & mask) - low
        if not 0 <= since < ticks:
            place = (since + low) // ticks
            low = place * ticks
        if 0 <= place < slices and number < channels:
            counts[place, number] += 1
        else:
            outside += 1
    return outside, lost, rolled
