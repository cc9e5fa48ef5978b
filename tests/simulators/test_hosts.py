"""Hosts: the same bytes at the same virtual time, in process and over sockets; nothing can hang the clock."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterator

import pytest

from daq.devices.clock import RealClock
from daq.ports import Clock, Connection
from simulators.clock import VirtualClock
from simulators.hosts import Host, Instrument, Listener, Send, Session, run_real, serve

S = 1_000_000_000
ADDRESS = "tcp://127.0.0.1:7801"
JOIN_S = 30.0


class Echo:
    """Gives back what it gets; `late <tenths>` comes so much later; keeps what it was fed."""

    def __init__(self, clock: Clock) -> None:
        self.clock, self.fed = clock, list[bytes]()

    def session(self, send: Send) -> Session:
        return EchoSession(self, send)


class EchoSession:
    def __init__(self, echo: Echo, send: Send) -> None:
        self._echo, self._send = echo, send

    def feed(self, data: bytes) -> bytes:
        self._echo.fed.append(data)
        if not data.startswith(b"late "):
            return data
        after_ns = int(data.split()[1]) * S // 10
        self._echo.clock.call_at(self._echo.clock.now_ns() + after_ns, lambda: self._send(data))
        return b""


def read(clock: Clock, connection: Connection, size: int) -> bytes:
    data = b""
    while len(data) < size and clock.wait_readable(connection, clock.now_ns() + 10 * S):
        data += connection.recv(size - len(data))
    return data


@pytest.mark.parametrize("transport", ["direct", "tcp"])
class TestHost:
    @pytest.fixture
    def clock(self) -> VirtualClock:
        return VirtualClock(0)

    @pytest.fixture
    def echo(self, clock: VirtualClock) -> Echo:
        return Echo(clock)

    @pytest.fixture
    def host(self, clock: VirtualClock, echo: Echo, transport: str) -> Iterator[Host]:
        with serve(clock, ADDRESS, echo, transport) as host:
            yield host

    @pytest.fixture
    def connection(self, clock: VirtualClock, host: Host) -> Iterator[Connection]:
        connection = clock.connect(ADDRESS, 1.0)
        yield connection
        connection.close()

    def test_a_command_takes_no_virtual_time(self, clock: VirtualClock, connection: Connection) -> None:
        connection.send(b"N?\n")

        readable = clock.wait_readable(connection, 5 * S)

        assert (readable, connection.recv(100), clock.now_ns()) == (True, b"N?\n", 0)

    def test_a_command_reaches_the_instrument_in_one_piece(self, connection: Connection, echo: Echo) -> None:
        connection.send(b"N?\n")
        connection.send(b"ha")
        connection.send(b"lf\n")

        assert echo.fed == [b"N?\n", b"ha", b"lf\n"]

    def test_a_megabyte_comes_back_unchanged(self, clock: VirtualClock, connection: Connection) -> None:
        data = bytes(range(256)) * 4096

        connection.send(data)

        assert read(clock, connection, len(data)) == data

    def test_replies_wait_together_and_are_read_in_order(self, connection: Connection) -> None:
        for word in (b"one ", b"two ", b"three "):
            connection.send(word)

        assert (connection.recv(5), connection.recv(100)) == (b"one t", b"wo three ")

    def test_nothing_waiting_blocks_nobody(self, connection: Connection) -> None:
        with pytest.raises(BlockingIOError):
            connection.recv(100)

    def test_silence_ends_at_the_deadline(self, clock: VirtualClock, connection: Connection) -> None:
        readable = clock.wait_readable(connection, 5 * S)

        assert (readable, clock.now_ns()) == (False, 5 * S)

    def test_a_late_reply_wakes_its_waiter_at_its_time(
        self, clock: VirtualClock, connection: Connection
    ) -> None:
        connection.send(b"late 7\n")

        readable = clock.wait_readable(connection, 5 * S)

        assert (readable, connection.recv(100), clock.now_ns()) == (True, b"late 7\n", 7 * S // 10)

    def test_a_late_reply_that_nobody_reads_holds_no_time(
        self, clock: VirtualClock, connection: Connection
    ) -> None:
        connection.send(b"late 7\n")

        clock.sleep_until(36_000 * S)

        assert (clock.now_ns(), connection.recv(100)) == (36_000 * S, b"late 7\n")

    def test_a_host_that_dies_ends_the_stream_behind_its_last_bytes(
        self, clock: VirtualClock, connection: Connection, host: Host
    ) -> None:
        connection.send(b"last")
        clock.call_at(2 * S, host.close)

        clock.sleep_until(3 * S)

        assert [connection.recv(100) for _ in range(3)] == [b"last", b"", b""]

    def test_the_death_of_a_host_wakes_whoever_reads(
        self, clock: VirtualClock, connection: Connection, host: Host
    ) -> None:
        clock.call_at(2 * S, host.close)

        readable = clock.wait_readable(connection, 5 * S)

        assert (readable, connection.recv(100), clock.now_ns()) == (True, b"", 2 * S)

    def test_bytes_for_a_dead_host_raise_and_hold_no_time(
        self, clock: VirtualClock, connection: Connection, host: Host
    ) -> None:
        connection.send(b"late 7\n")
        host.close()

        with pytest.raises(BrokenPipeError):
            connection.send(b"N?\n")
        clock.sleep_until(10 * S)

        assert (clock.now_ns(), connection.recv(100)) == (10 * S, b"")

    def test_a_dead_host_refuses_until_it_is_back(
        self, clock: VirtualClock, connection: Connection, host: Host
    ) -> None:
        host.close()
        with pytest.raises(ConnectionRefusedError):
            clock.connect(ADDRESS, 1.0)

        host.open()
        again = clock.connect(ADDRESS, 1.0)
        again.send(b"N?\n")

        assert again.recv(100) == b"N?\n"
        again.close()

    def test_a_late_reply_never_reaches_the_next_connection(
        self, clock: VirtualClock, connection: Connection
    ) -> None:
        connection.send(b"late 7\n")
        connection.close()
        again = clock.connect(ADDRESS, 1.0)

        readable = clock.wait_readable(again, 5 * S)

        assert not readable
        again.close()

    def test_two_connections_have_replies_of_their_own(
        self, clock: VirtualClock, connection: Connection
    ) -> None:
        other = clock.connect(ADDRESS, 1.0)
        connection.send(b"mine")
        other.send(b"other")

        assert (other.recv(100), connection.recv(100)) == (b"other", b"mine")
        other.close()

    @pytest.mark.parametrize(
        "use", [lambda connection: connection.recv(1), lambda connection: connection.send(b"N?\n")]
    )
    def test_a_closed_connection_is_refused(
        self, connection: Connection, use: Callable[[Connection], object]
    ) -> None:
        connection.close()
        connection.close()

        with pytest.raises(OSError, match="closed"):
            use(connection)

    def test_an_address_is_served_once(self, clock: VirtualClock, host: Host, transport: str) -> None:
        with pytest.raises(OSError, match="served already"):
            serve(clock, ADDRESS, Echo(clock), transport)


class TestRealHost:
    """The same instrument behind a real port, answered by `run_real` in a thread."""

    @pytest.fixture
    def clock(self) -> RealClock:
        return RealClock()

    @pytest.fixture
    def run(self) -> Iterator[Callable[[Instrument], str]]:
        stop, threads = threading.Event(), list[threading.Thread]()

        def start(instrument: Instrument) -> str:
            listener = Listener("tcp://127.0.0.1:0", instrument)
            threads.append(threading.Thread(target=run_real, args=([listener], stop), daemon=True))
            threads[-1].start()
            return listener.address

        yield start
        stop.set()
        for thread in threads:
            thread.join(JOIN_S)
        assert not any(thread.is_alive() for thread in threads)

    def test_it_answers(self, clock: RealClock, run: Callable[[Instrument], str]) -> None:
        connection = clock.connect(run(Echo(clock)), 5.0)

        connection.send(b"N?\n")

        assert read(clock, connection, 3) == b"N?\n"
        connection.close()

    def test_a_megabyte_comes_back_unchanged(
        self, clock: RealClock, run: Callable[[Instrument], str]
    ) -> None:
        connection = clock.connect(run(Echo(clock)), 5.0)
        data = bytes(range(256)) * 4096
        sender = threading.Thread(target=connection.send, args=(data,), daemon=True)

        sender.start()

        assert read(clock, connection, len(data)) == data
        sender.join(JOIN_S)
        connection.close()

    def test_late_bytes_come_late(self, clock: RealClock, run: Callable[[Instrument], str]) -> None:
        connection = clock.connect(run(Echo(clock)), 5.0)
        asked_ns = clock.now_ns()

        connection.send(b"late 1\n")

        assert read(clock, connection, 7) == b"late 1\n"
        assert clock.now_ns() - asked_ns >= S // 10
        connection.close()

    def test_a_client_that_leaves_disturbs_nobody(
        self, clock: RealClock, run: Callable[[Instrument], str]
    ) -> None:
        address = run(Echo(clock))
        leaver, other = clock.connect(address, 5.0), clock.connect(address, 5.0)

        leaver.send(b"late 1\n")
        leaver.close()
        other.send(b"N?\n")
        other.send(b"late 2\n")

        assert read(clock, other, 10) == b"N?\nlate 2\n"
        other.close()


def test_stopping_ends_the_connections_and_gives_the_port_back() -> None:
    clock, stop = RealClock(), threading.Event()
    listener = Listener("tcp://127.0.0.1:0", Echo(clock))
    thread = threading.Thread(target=run_real, args=([listener], stop), daemon=True)
    thread.start()
    connection = clock.connect(listener.address, 5.0)
    connection.send(b"N?\n")
    first = read(clock, connection, 3)

    stop.set()
    thread.join(JOIN_S)

    assert first == b"N?\n"
    assert clock.wait_readable(connection, clock.now_ns() + 10 * S)
    assert connection.recv(100) == b""
    with pytest.raises(ConnectionRefusedError):
        clock.connect(listener.address, 1.0)
    connection.close()
