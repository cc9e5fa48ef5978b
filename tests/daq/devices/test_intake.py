"""Intake: words of a stream are kept gate by gate, and none is taken for another gate's."""

from __future__ import annotations

import socket
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import numpy as np
import pytest

from daq.devices.clock import RealClock
from daq.devices.events import U32, Layout
from daq.devices.intake import Form, Intake
from daq.errors import DeviceError
from daq.ports import Clock
from simulators.clock import VirtualClock
from simulators.hosts import Host, Send, Session, serve
from simulators.listmode import StreamSource, example_words

ADDRESS = "tcp://127.0.0.1:7807"
S = 1_000_000_000


class Words:
    """An instrument that sends what a test gives it."""

    def __init__(self) -> None:
        self.send: Send = lambda data: None

    def session(self, send: Send) -> Session:
        self.send = send
        return self

    def feed(self, data: bytes) -> bytes:
        return b""


@contextmanager
def intake(form: Form) -> Iterator[tuple[Words, Intake, VirtualClock, Host]]:
    clock, words = VirtualClock(0), Words()
    with serve(clock, ADDRESS, words) as host:
        taking = Intake(clock, clock.connect(ADDRESS, 1.0), form, "stream")
        taking.ticks = 1 << 40
        yield words, taking, clock, host
        taking.close()


def gate(number: int, *events: int, layout: Layout = U32) -> bytes:
    marks = layout.special(layout.opened, number), layout.special(layout.closed, number)
    return np.array([marks[0], *events, marks[1]], layout.dtype).tobytes()


def soon(clock: Clock) -> int:
    return clock.now_ns() + S


@pytest.mark.parametrize("cut", [1, 3, 1000])
def test_a_gate_comes_home_whole_however_its_bytes_are_cut(cut: int) -> None:
    stream = gate(1, U32.event(0, 5), U32.special(63, 1), U32.event(1, 2))
    with intake(Form(U32, channels=2)) as (words, taking, clock, _):
        for place in range(0, len(stream), cut):
            words.send(stream[place : place + cut])

        found = taking.take(1, soon(clock))

    assert found.binned.counts.tolist() == [[1, 1]]
    assert np.frombuffer(found.packed(), "<u8").tolist() == [10, 2 * ((1 << 25) + 2) + 1]


def test_words_between_gates_and_of_gates_given_up_belong_to_nobody() -> None:
    with intake(Form(U32)) as (words, taking, clock, _):
        stray = np.array([U32.event(0, 1)] * 3, U32.dtype).tobytes()
        words.send(gate(1, U32.event(0, 1)) + stray)
        words.send(gate(2, U32.event(0, 4), U32.event(0, 6))[:-4] + gate(3, U32.event(0, 9)))

        found = taking.take(3, soon(clock))

    assert np.frombuffer(found.packed(), "<u8").tolist() == [9]


def test_a_gate_whose_end_does_not_come_is_a_timeout() -> None:
    with intake(Form(U32)) as (words, taking, clock, _):
        words.send(gate(1, U32.event(0, 1))[:-4])

        with pytest.raises(DeviceError, match="the end of gate 1 did not come") as late:
            taking.take(1, soon(clock))

    assert (late.value.kind, clock.now_ns()) == ("timeout", S)


def test_a_stream_that_ends_is_a_lost_link() -> None:
    with intake(Form(U32)) as (_, taking, clock, host):
        host.close()

        with pytest.raises(DeviceError) as lost:
            taking.take(1, soon(clock))

    assert lost.value.kind == "lost"


def test_events_of_two_channels_that_come_out_of_order_are_put_in_order() -> None:
    with intake(Form(U32, channels=2)) as (words, taking, clock, _):
        words.send(gate(1, U32.event(1, 5), U32.event(0, 4)))

        times = np.frombuffer(taking.take(1, soon(clock)).packed(), "<u8")

    assert times.tolist() == [8, 11]


def test_events_need_not_be_kept() -> None:
    with intake(Form(U32, keep=False)) as (words, taking, clock, _):
        words.send(gate(1, U32.event(0, 4)))

        found = taking.take(1, soon(clock))

    assert (found.packed(), found.binned.counts.tolist()) == (b"", [[1]])


@contextmanager
def streaming(run: Callable[[socket.socket], None]) -> Iterator[Intake]:
    """Give an intake on the real clock, and something that sends from a thread."""
    with socket.create_server(("127.0.0.1", 0)) as server:
        clock = RealClock()
        connection = clock.connect(f"tcp://127.0.0.1:{server.getsockname()[1]}", 5.0)
        client, _ = server.accept()
        with client:
            taking = Intake(clock, connection, Form(U32, channels=4, slices=2), "stream")
            taking.ticks = 1 << 40
            sender = threading.Thread(target=run, args=(client,))
            sender.start()
            yield taking
            taking.close()
            sender.join(30.0)


def test_on_the_real_clock_gates_are_taken_while_nobody_asks() -> None:
    body = example_words(U32, 50_000, 1000, 4, seed=1)
    source, over, sent = StreamSource(body, U32, 5e6), threading.Event(), threading.Event()

    def run(client: socket.socket) -> None:
        source.run(client, over, gates=3)
        sent.set()

    clock = RealClock()
    with streaming(run) as taking:
        assert sent.wait(30.0)

        counts = [int(taking.take(one, clock.now_ns() + 30 * S).binned.counts.sum()) for one in (1, 2, 3)]

    assert (counts, source.lost) == ([50_000] * 3, 0)


def test_what_the_buffer_of_the_source_cannot_hold_is_marked_and_known() -> None:
    """A source that is far quicker than its small buffer allows loses words, and says how many."""
    body = example_words(U32, 400_000, 1000, 4, seed=1)
    source = StreamSource(body, U32, 1e9, fifo_bytes=256 * 1024)
    clock = RealClock()
    with streaming(lambda client: source.run(client, threading.Event(), gates=1)) as taking:
        found = taking.take(1, clock.now_ns() + 30 * S)

    words = len(body) // 4 - 2
    assert found.binned.lost == source.lost > 0
    assert source.sent + source.lost == words
