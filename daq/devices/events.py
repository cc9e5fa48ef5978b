"""Events: list-mode words become counts by channel and slice, in plain numpy, or compiled where numba is.

==========  ================================================================================================
word        bits
==========  ================================================================================================
32 bits     31: special; 30-25: channel; 24-0: tag. Special: 63 the tag counter has rolled over (tag: how
            often), 62 events were lost (tag: how many), 61 a gate has opened, 60 it has closed (tag: number
            of the gate)
64 bits     63: special; 62-56: channel; 55-0: tag. Special: 127 rolled over, 126 lost, 125 opened, 124 closed
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

    @property
    def opened(self) -> int:
        """The special number of a gate's opening."""
        return self.rolled - 2

    @property
    def closed(self) -> int:
        """The special number of a gate's end, the lowest of all."""
        return self.rolled - 3

    def event(self, channel: int, tag: int) -> int:
        """Return the word of an event."""
        return channel << self.tag_bits | tag & (1 << self.tag_bits) - 1

    def special(self, number: int, tag: int) -> int:
        """Return the word of a roll-over or a loss."""
        return 1 << (self.bits - 1) | self.event(number, tag)


FEW_CHANNELS = 8
STRETCH = 1 << 15  # words that are sorted at once: what is made of them stays in the cache
BLOCK = 2048  # words that the compiled rule looks at before it counts them

U32, U64 = Layout("<u4", 32, 25, 6), Layout("<u8", 64, 56, 7)


@dataclass(slots=True)
class Binned:
    """What a gate holds so far: counts (slice, channel), events before and behind the slices, losses."""

    counts: Counts
    outside: int = 0
    lost: int = 0
    rolled: int = 0  # roll-overs so far: the high part of every tag


class Binner:
    """Sorts the words of one gate into slices of equal length.

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
        self._sort = _compiled() if compiled and find_spec("numba") else sort_words

    def sort(self, words: Words) -> None:
        """Take whole words as they come."""
        self._sort(words, self.binned, self._layout, self._first_tick, self._ticks)


Sort = Callable[[Words, Binned, Layout, int, int], None]


def sort_words(words: Words, binned: Binned, layout: Layout, first_tick: int, ticks: int) -> None:
    """Add words to what is binned: cut at the special words, each stretch between them at once."""
    for start in range(0, len(words), STRETCH):
        stretch = words[start : start + STRETCH]
        begun, top = 0, stretch.dtype.type(1 << (layout.bits - 1))
        for place in np.flatnonzero(stretch >= top).tolist() if stretch.max() >= top else ():
            _add(stretch[begun:place], binned, layout, first_tick, ticks)
            _take_special(int(stretch[place]), binned, layout)
            begun = place + 1
        _add(stretch[begun:], binned, layout, first_tick, ticks)


def times_of(words: Words, layout: Layout, rolled: int, channels: int) -> NDArray[np.uint64]:
    """Return when events came, in ticks times channels, plus the channel; `rolled` roll-overs came before.

    An event of a channel that is not one of them is left out.
    """
    number = words >> words.dtype.type(layout.tag_bits)
    ticks = (words & words.dtype.type((1 << layout.tag_bits) - 1)).astype(np.uint64)
    special = words >= words.dtype.type(1 << (layout.bits - 1))
    turns: Any = np.uint64(rolled)
    if special.any():
        rolls = number == words.dtype.type(layout.rolled | 1 << layout.channel_bits)
        turns = turns + np.cumsum(np.where(rolls, ticks, np.uint64(0)))
    times = (ticks + (turns << np.uint64(layout.tag_bits))) * np.uint64(channels) + number
    good = number < channels  # a special word's number is above every channel's
    return times if good.all() else times[good]


def _take_special(word: int, binned: Binned, layout: Layout) -> None:
    number, tag = word >> layout.tag_bits & layout.rolled, word & (1 << layout.tag_bits) - 1
    if number == layout.rolled:
        binned.rolled += tag
    elif number == layout.rolled - 1:
        binned.lost += tag


def _add(words: Words, binned: Binned, layout: Layout, first_tick: int, ticks: int) -> None:
    """Add a stretch of events without a roll-over; most lie within one slice, and nothing is divided then."""
    if not words.size:
        return None
    slices, channels = binned.counts.shape
    base = (binned.rolled << layout.tag_bits) - first_tick
    tags = words & words.dtype.type((1 << layout.tag_bits) - 1)
    channel = (words >> words.dtype.type(layout.tag_bits)).astype(np.uint8)
    first, last = ((base + int(edge)) // ticks for edge in (tags.min(), tags.max()))
    if first != last:
        return _add_across(tags, channel, binned, base, ticks)
    if not 0 <= first < slices:
        binned.outside += words.size
        return None
    found = _by_channel(channel, channels)
    binned.counts[first] += found
    binned.outside += words.size - int(found.sum())
    return None


def _by_channel(channel: NDArray[np.uint8], channels: int) -> Counts:
    """Return how many events each channel has; comparing is quicker than a histogram for a few channels."""
    if channels > FEW_CHANNELS:
        return np.bincount(channel, minlength=channels)[:channels]
    return np.array([np.count_nonzero(channel == one) for one in range(channels)])


def _add_across(tags: Words, channel: NDArray[np.uint8], binned: Binned, base: int, ticks: int) -> None:
    """Add a stretch that reaches over several slices: one histogram of (slice, channel)."""
    slices, channels = binned.counts.shape
    kind: Any = np.int64 if tags.dtype.itemsize == 8 or ticks > np.iinfo(np.int32).max else np.int32
    # the slice of a tag, with the part that all of them share taken out so that it fits a small integer
    shared, offset = divmod(base, ticks)
    if kind is np.int32 and offset > np.iinfo(np.int32).max - int(tags.max()):
        kind = np.int64
    place = (tags.astype(kind) + kind(offset)) // kind(ticks) + kind(np.clip(shared, -(2**30), 2**30))
    good = (place >= 0) & (place < slices) & (channel < channels)
    binned.outside += int(good.size - np.count_nonzero(good))
    flat = np.bincount(place[good] * kind(channels) + channel[good], minlength=slices * channels)
    binned.counts += flat.reshape(slices, channels)


@cache  # compiling takes a second
def _compiled() -> Sort:
    numba: Any = import_module("numba")
    loop = numba.njit(nogil=True)(count_words)

    def sort(words: Words, binned: Binned, layout: Layout, first_tick: int, ticks: int) -> None:
        typed = words_of(layout)
        outside, lost, binned.rolled = loop(words, binned.counts, *typed, binned.rolled, first_tick, ticks)
        binned.outside, binned.lost = binned.outside + outside, binned.lost + lost

    return sort


def words_of(layout: Layout) -> tuple[Any, Any, Any, int]:
    """Return mask of the tag, shift to the channel and top bit as words, and the number of a roll-over."""
    kind = np.dtype(layout.dtype).type
    return (
        kind((1 << layout.tag_bits) - 1),
        kind(layout.tag_bits),
        kind(1 << (layout.bits - 1)),
        layout.rolled,
    )


def count_words(
    words: Any,
    counts: Any,
    mask: Any,
    shift: Any,
    top: Any,
    mark: int,
    rolled: int,
    first_tick: int,
    ticks: int,
) -> tuple[int, int, int]:
    """Add words to counts and return (events outside, lost, roll-overs): the rule, for a compiler.

    Block by block: most have no special word and lie within one slice; then only channels are told apart.
    """
    outside, lost, wrap = 0, 0, np.int64(mask) + 1
    slices, channels = counts.shape
    found = np.zeros((2, mark + 1), np.int64)
    for start in range(0, words.size, BLOCK):
        block = words[start : start + BLOCK]
        low, high, special = block[0] & mask, block[0] & mask, block[0]
        for word in block:
            low, high, special = min(low, word & mask), max(high, word & mask), special | word
        place = (rolled * wrap - first_tick + np.int64(low)) // ticks
        last = (rolled * wrap - first_tick + np.int64(high)) // ticks
        if special & top == 0 and place == last and 0 <= place < slices:
            found[:] = 0
            for at in range(block.size):  # in turn: one alone would wait for itself at every event
                found[at & 1, block[at] >> shift] += 1
            counts[place] += found[0, :channels] + found[1, :channels]
            outside += found[:, channels:].sum()
            continue
        for word in block:
            number, tag = np.int64(word >> shift) & mark, np.int64(word & mask)
            place = (rolled * wrap - first_tick + tag) // ticks
            if word & top:
                rolled += tag * (number == mark)
                lost += tag * (number == mark - 1)
            elif 0 <= place < slices and number < channels:
                counts[place, number] += 1
            else:
                outside += 1
    return outside, lost, rolled
