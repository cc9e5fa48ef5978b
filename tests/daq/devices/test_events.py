"""List-mode words: whatever the chunks, slices and roll-overs, numpy and the plain rule count the same."""

from __future__ import annotations

import socket
import threading
from collections.abc import Iterator

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.devices.events import U32, U64, Binned, Binner, Layout, count_words, words_of
from daq.devices.stream import pump
from daq.errors import DeviceError
from simulators.listmode import StreamSource, example_words


def plainly(words: bytes, layout: Layout, channels: int, slices: int, first_tick: int, ticks: int) -> Binned:
    """Return what the plain rule counts, word by word."""
    binned = Binned(np.zeros((slices, channels), dtype=np.int64))
    array = np.frombuffer(words, layout.dtype)
    outside, lost, rolled = count_words(array, binned.counts, *words_of(layout), 0, first_tick, ticks)
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
    stream = np.array(words, layout.dtype).tobytes()
    first_tick = data.draw(st.integers(0, 2 ** (layout.tag_bits + 1)))
    ticks = data.draw(st.integers(1, 2 ** (layout.tag_bits + 2)))
    cut = data.draw(st.integers(1, 40))
    binner = Binner(layout, 4, 5, first_tick, ticks)

    for place in range(0, len(stream), cut):
        binner.feed(stream[place : place + cut])

    assert same(binner.binned, plainly(stream, layout, 4, 5, first_tick, ticks))


@pytest.mark.parametrize("compiled", [False, True])
def test_every_event_of_a_long_stream_is_in_its_slice(compiled: bool) -> None:
    words = example_words(U32, 200_000, 1000, 4, seed=3)
    ticks = (200 << U32.tag_bits) // 22 + 1
    binner = Binner(U32, 4, 22, 0, ticks, compiled=compiled)

    for place in range(0, len(words), 65_537):
        binner.feed(words[place : place + 65_537])

    assert binner.binned.counts.sum() == 200_000
    assert same(binner.binned, plainly(words, U32, 4, 22, 0, ticks))
    expected = 200_000 / 22 / 4  # even in time and over channels: within six standard errors
    assert abs(binner.binned.counts[:-1] - expected).max() < 6 * expected**0.5


def test_words_are_as_the_table_says() -> None:
    assert U32.event(5, 3) == 5 << 25 | 3
    assert U32.special(63, 1) == 1 << 31 | 63 << 25 | 1
    assert U64.special(126, 9) == 1 << 63 | 126 << 56 | 9
    assert (U32.rolled, U64.rolled) == (63, 127)


@pytest.fixture
def ends() -> Iterator[tuple[socket.socket, socket.socket]]:
    one, other = socket.socketpair()
    yield one, other
    one.close()
    other.close()


def test_a_stream_is_kept_and_counted_whole(ends: tuple[socket.socket, socket.socket]) -> None:
    here, there = ends
    words, kept = example_words(U32, 50_000, 1000, 4, seed=1), list[bytes]()
    binner = Binner(U32, 4, 1, 0, 1 << 40)

    def send() -> None:
        there.sendall(words)
        there.close()

    sender = threading.Thread(target=send)
    sender.start()
    many = pump(here, binner, kept.append, threading.Event())
    sender.join()

    assert (many, b"".join(kept)) == (len(words), words)
    assert binner.binned.counts.sum() == 50_000


def test_what_the_buffer_of_the_source_cannot_hold_is_marked(
    ends: tuple[socket.socket, socket.socket],
) -> None:
    """The reader begins late: the source's small buffer has overflowed by then, and it says by how much."""
    here, there = ends
    source = StreamSource(example_words(U32, 100_000, 1000, 4, seed=1), U32, 20e6, fifo_bytes=256 * 1024)
    over, binner = threading.Event(), Binner(U32, 4, 1, 0, 1 << 60)
    sender = threading.Thread(target=source.run, args=(there, over), daemon=True)
    sender.start()
    while not source.lost:
        here.settimeout(1.0)
        binner.feed(here.recv(1 << 16))
    over.set()
    reader = threading.Thread(target=pump, args=(here, binner, list[bytes]().append, threading.Event()))
    reader.start()
    sender.join(30.0)
    there.close()
    reader.join(30.0)

    assert binner.binned.lost == source.lost > 0


def test_a_stream_that_breaks_is_a_lost_link(ends: tuple[socket.socket, socket.socket]) -> None:
    here, there = ends
    here.sendall(b"unread")
    there.close()  # with something unread: the connection is reset

    with pytest.raises(DeviceError) as lost:
        pump(here, Binner(U32, 1, 1, 0, 1), list[bytes]().append, threading.Event())

    assert lost.value.kind == "lost"
