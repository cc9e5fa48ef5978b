"""List-mode words: whatever the chunks, slices and roll-overs, numpy and the plain rule count the same."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.devices.events import U32, U64, Binned, Binner, Layout, Words, count_words, times_of, words_of
from simulators.listmode import example_words


def plainly(words: Words, layout: Layout, channels: int, slices: int, first_tick: int, ticks: int) -> Binned:
    """Return what the plain rule counts, word by word."""
    binned = Binned(np.zeros((slices, channels), dtype=np.int64))
    outside, lost, rolled = count_words(words, binned.counts, *words_of(layout), 0, first_tick, ticks)
    return Binned(binned.counts, outside, lost, rolled)


def same(one: Binned, other: Binned) -> bool:
    numbers = (one.outside, one.lost, one.rolled) == (other.outside, other.lost, other.rolled)
    return numbers and bool((one.counts == other.counts).all())


@pytest.mark.parametrize("layout", [U32, U64], ids=["32 bits", "64 bits"])
@settings(max_examples=60, deadline=None)
@given(data=st.data())
def test_every_way_to_cut_a_stream_gives_the_counts_of_the_plain_rule(layout: Layout, data) -> None:
    words = data.draw(
        st.lists(
            st.one_of(
                st.builds(layout.event, st.integers(0, 5), st.integers(0, 2**layout.tag_bits - 1)),
                st.builds(layout.special, st.just(layout.rolled), st.integers(1, 3)),
                st.builds(layout.special, st.just(layout.rolled - 1), st.integers(1, 1000)),
            ),
            max_size=60,
        )
    )
    stream = np.array(words, layout.dtype)
    first_tick = data.draw(st.integers(0, 2 ** (layout.tag_bits + 1)))
    ticks = data.draw(st.integers(1, 2 ** (layout.tag_bits + 2)))
    cut = data.draw(st.integers(1, 40))
    binner = Binner(layout, 4, 5, first_tick, ticks)

    for place in range(0, len(words), cut):
        binner.sort(stream[place : place + cut])

    assert same(binner.binned, plainly(stream, layout, 4, 5, first_tick, ticks))


@pytest.mark.parametrize("compiled", [False, True])
def test_every_event_of_a_long_stream_is_in_its_slice(compiled: bool) -> None:
    words = np.frombuffer(example_words(U32, 200_000, 1000, 4, seed=3), U32.dtype)
    ticks = (200 << U32.tag_bits) // 22 + 1
    binner = Binner(U32, 4, 22, 0, ticks, compiled=compiled)

    for place in range(0, len(words), 65_537):
        binner.sort(words[place : place + 65_537])

    assert binner.binned.counts.sum() == 200_000
    assert same(binner.binned, plainly(words, U32, 4, 22, 0, ticks))
    expected = 200_000 / 22 / 4  # even in time and over channels: within six standard errors
    assert abs(binner.binned.counts[:-1] - expected).max() < 6 * expected**0.5


def test_words_are_as_the_table_says() -> None:
    assert U32.event(5, 3) == 5 << 25 | 3
    assert U32.special(63, 1) == 1 << 31 | 63 << 25 | 1
    assert U64.special(126, 9) == 1 << 63 | 126 << 56 | 9
    assert (U32.rolled, U64.rolled) == (63, 127)


@pytest.mark.parametrize("layout", [U32, U64], ids=["32 bits", "64 bits"])
def test_times_go_on_over_roll_overs_and_say_their_channel(layout: Layout) -> None:
    words = [
        layout.event(0, 7),
        layout.special(layout.rolled, 2),
        layout.event(2, 5),
        layout.special(layout.rolled - 1, 99),  # a loss is no event
        layout.event(3, 6),  # nor is one of a channel that there is not
        layout.special(layout.rolled, 1),
        layout.event(1, 0),
    ]
    wrap = 1 << layout.tag_bits

    times = times_of(np.array(words, layout.dtype), layout, 1, 3)

    assert times.tolist() == [3 * (wrap + 7), 3 * (3 * wrap + 5) + 2, 3 * (4 * wrap) + 1]


def test_a_gate_is_named_by_the_words_around_it() -> None:
    words = np.frombuffer(example_words(U32, 10, 1000, 4, seed=3, gate=9), U32.dtype)

    assert (int(words[0]), int(words[-1])) == (U32.special(61, 9), U32.special(60, 9))
