"""The real clock: waits are bounded by deadlines on the monotonic clock, and end early when they may."""

from __future__ import annotations

import socket
import threading
import time
from collections.abc import Iterator

import pytest

from daq.devices.clock import RealClock
from daq.ports import Clock, Connection

MS = 1_000_000
LONG_NS = 30_000 * MS


@pytest.fixture
def clock() -> Clock:
    return RealClock()


@pytest.fixture
def listener() -> Iterator[socket.socket]:
    with socket.create_server(("127.0.0.1", 0)) as listener:
        yield listener


@pytest.fixture
def connection(clock: Clock, listener: socket.socket) -> Iterator[Connection]:
    connection = clock.connect(address_of(listener), 0.05)
    yield connection
    connection.close()


def address_of(listener: socket.socket) -> str:
    return f"tcp://127.0.0.1:{listener.getsockname()[1]}"


def test_run_time_goes_on_from_where_it_is_told() -> None:
    before_ns = time.monotonic_ns()
    clock = RealClock(start_ns=5_000 * MS)

    now_ns = clock.now_ns()

    assert 0 <= now_ns - 5_000 * MS <= time.monotonic_ns() - before_ns


def test_utc_is_the_machines(clock: Clock) -> None:
    before_ns = time.time_ns()

    utc_ns = clock.utc_ns()

    assert before_ns <= utc_ns <= time.time_ns()


def test_a_sleep_is_never_too_short(clock: Clock) -> None:
    at_ns = clock.now_ns() + 5 * MS

    clock.sleep_until(at_ns)

    assert clock.now_ns() >= at_ns


def test_a_flag_that_stays_down_ends_the_waiting_at_the_deadline(clock: Clock) -> None:
    flag, at_ns = clock.event(), clock.now_ns() + 5 * MS
    flag.set()
    flag.clear()

    came = flag.wait_until(at_ns)

    assert (came, flag.is_set()) == (False, False)
    assert clock.now_ns() >= at_ns


def test_a_call_comes_at_its_time_and_may_raise_a_flag(clock: Clock) -> None:
    flag, at_ns = clock.event(), clock.now_ns() + 5 * MS
    clock.call_at(at_ns, flag.set)

    came = flag.wait_until(clock.now_ns() + LONG_NS)

    assert came
    assert clock.now_ns() >= at_ns


def test_the_end_of_time_can_be_waited_for(clock: Clock) -> None:
    flag = clock.event()
    clock.call_at(clock.now_ns() + MS, flag.set)

    assert flag.wait_until(2**62)


def test_nobody_at_the_address_is_an_oserror(clock: Clock, listener: socket.socket) -> None:
    address = address_of(listener)
    listener.close()

    with pytest.raises(OSError):
        clock.connect(address, 1.0)


def test_silence_ends_at_the_deadline_and_blocks_nobody(clock: Clock, connection: Connection) -> None:
    at_ns = clock.now_ns() + 5 * MS

    readable = clock.wait_readable(connection, at_ns)

    assert not readable
    assert clock.now_ns() >= at_ns
    with pytest.raises(BlockingIOError):
        connection.recv(100)


def test_bytes_and_then_the_end_of_the_stream_are_read(
    clock: Clock, connection: Connection, listener: socket.socket
) -> None:
    peer, _ = listener.accept()
    connection.send(b"N?\n")
    asked = peer.recv(100)
    peer.sendall(b"12\n")
    peer.close()

    read = list[bytes]()
    while b"" not in read and clock.wait_readable(connection, clock.now_ns() + LONG_NS):
        read.append(connection.recv(100))

    assert (asked, b"".join(read), read[-1]) == (b"N?\n", b"12\n", b"")


def test_closing_from_another_thread_wakes_the_reader(
    clock: Clock, connection: Connection, listener: socket.socket
) -> None:
    peer, _ = listener.accept()
    until_ns = clock.now_ns() + LONG_NS
    clock.call_at(clock.now_ns() + 5 * MS, connection.close)

    readable = clock.wait_readable(connection, until_ns)

    assert readable
    assert clock.now_ns() < until_ns
    with pytest.raises(OSError):
        connection.recv(100)
    peer.close()


def test_a_closed_connection_holds_no_reader(clock: Clock, connection: Connection) -> None:
    connection.close()

    readable = clock.wait_readable(connection, clock.now_ns() + LONG_NS)

    assert readable


def test_a_peer_that_takes_nothing_does_not_hold_the_sender_for_ever(
    connection: Connection, listener: socket.socket
) -> None:
    with pytest.raises(TimeoutError, match="takes no more"):
        connection.send(b"x" * 50_000_000)


def test_a_stop_gets_through_while_another_thread_waits_for_a_reply(
    clock: Clock, connection: Connection, listener: socket.socket
) -> None:
    peer, _ = listener.accept()
    peer.settimeout(10.0)
    seen = list[bool]()
    reader = threading.Thread(
        target=lambda: seen.append(clock.wait_readable(connection, clock.now_ns() + LONG_NS)), daemon=True
    )
    reader.start()

    connection.send(b"STOP\n")
    stopped = peer.recv(100)
    peer.sendall(b"ok\n")
    reader.join(10.0)

    assert (stopped, seen) == (b"STOP\n", [True])
    peer.close()
