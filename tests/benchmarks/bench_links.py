"""Links: round trips, list-mode streams, block reads and duty cycle, each beside a yardstick of the same run.

python -m tests.benchmarks.bench_links
"""

from __future__ import annotations

import multiprocessing
import socket
import statistics
import tempfile
import threading
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from importlib.util import find_spec
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pyvisa

from daq.devices.clock import RealClock
from daq.devices.events import U32, U64, Binner, Layout
from daq.devices.intake import CHUNK
from daq.devices.links import Link
from daq.devices.wire import Wire
from daq.ports import Clock
from daq.records import Visit
from daq.sequencer import perform
from simulators.clock import VirtualClock
from simulators.hosts import Listener, Send, Session, run_real
from simulators.listmode import example_words
from tests.daq.devices.real import on_port
from tests.daq.devices.test_links import Device
from tests.standins import MemoryBench

MANY = 16_000_000
SLICES, CHANNELS = 22, 4
REPEATS = 5


def round_trips() -> None:
    """Print the time of a question over every kind of link."""
    wire = Wire(identity_reply=r"LANTERN,\w+,\d+")
    for kind in ("tcp", "socket", "serial", "rfc2217", "hislip"):
        clock = RealClock()
        with (
            tempfile.TemporaryDirectory() as folder,
            on_port(kind, Device(clock), Path(folder)) as port,
            Link(clock, port.address, wire, kind) as link,
        ):
            took_us = [1e6 * timed(lambda: link.ask("N?", r"\d+")) for _ in range(1000)]
        took_us.sort()
        print(
            f"question over {kind:8} median {statistics.median(took_us):7.0f} us, p99 {took_us[990]:7.0f} us"
        )


def timed(act: Callable[[], object]) -> float:
    began_s = time.perf_counter()
    act()
    return time.perf_counter() - began_s


def _send(words: bytes, port: int, times: int) -> None:
    with socket.create_connection(("127.0.0.1", port)) as client:
        for _ in range(times):
            client.sendall(words)


@contextmanager
def sender(target: Callable[..., None], *arguments: Any) -> Iterator[socket.socket]:
    """Give a connection to a process that sends."""
    with socket.create_server(("127.0.0.1", 0)) as server:
        spawn = multiprocessing.get_context("spawn")
        process = spawn.Process(target=target, args=(arguments[0], server.getsockname()[1], *arguments[1:]))
        process.start()
        stream, _ = server.accept()
        with stream:
            yield stream
        process.join()


class Took(NamedTuple):
    """Wall time and time of this process's own [s]."""

    wall_s: float
    own_s: float

    def over(self, other: Took) -> tuple[float, float]:
        """Return how many times longer it took."""
        return self.wall_s / other.wall_s, self.own_s / other.own_s


def raw_took(words: bytes, times: int) -> Took:
    """Return how long a bare loop of recv_into takes for so many times the words."""
    buffer = bytearray(CHUNK)
    with sender(_send, words, times) as stream:
        stream.recv_into(buffer)
        began = Took(time.perf_counter(), time.process_time())
        while stream.recv_into(buffer):
            pass
        return Took(time.perf_counter() - began.wall_s, time.process_time() - began.own_s)


def counted_took(words: bytes, layout: Layout, times: int, compiled: bool) -> Took:
    """Return how long it takes to receive and count them, chunk by chunk."""
    ticks, kind = (1 << 60) // SLICES, np.dtype(layout.dtype)
    for warm in (True, False):  # compiled first
        binner = Binner(layout, CHANNELS, SLICES, 0, ticks, compiled)
        if warm:
            binner.sort(np.frombuffer(words[:1024], kind))
    buffer = bytearray(CHUNK)
    with sender(_send, words, times) as stream:
        stream.recv_into(buffer, kind.itemsize, socket.MSG_WAITALL)
        began = Took(time.perf_counter(), time.process_time())
        while got := stream.recv_into(buffer, CHUNK, socket.MSG_WAITALL):  # gathered into whole chunks
            binner.sort(np.frombuffer(buffer, kind, got // kind.itemsize))
        took = Took(time.perf_counter() - began.wall_s, time.process_time() - began.own_s)
    assert binner.binned.counts.sum() + binner.binned.outside > 0.99 * times * len(words) / kind.itemsize
    return took


def streams() -> None:
    """Print received and counted words a second beside a bare receiver of the same run, wall and own time."""
    for layout in (U32, U64):
        words = example_words(layout, 2_000_000, 168_000, CHANNELS, seed=1)
        times = MANY // 2_000_000
        for name, compiled in (("numpy", False), ("numba", True))[: 2 if find_spec("numba") else 1]:
            wall, own, rates = list[float](), list[float](), list[float]()
            for _ in range(REPEATS):
                raw = raw_took(words, times)
                counted = counted_took(words, layout, times, compiled)
                rates.append(MANY / counted.wall_s)
                for ratios, ratio in zip((wall, own), raw.over(counted), strict=True):
                    ratios.append(ratio)
            print(
                f"stream of {layout.bits} bits, {name}: {statistics.median(rates) / 1e6:6.0f} M/s, "
                f"{statistics.median(wall):.2f} of a bare one ({min(wall):.2f} .. {max(wall):.2f}), "
                f"{statistics.median(own):.2f} by the process's own time",
                flush=True,
            )


def live_fraction(clock: Clock, overlapped: bool, visits: int) -> float:
    """Return live time over elapsed time: dwell 1 s, readout 0.3 s, moves of 0.5 s."""
    bench = MemoryBench(clock, mask_move_s=0.5, detector_move_s=0.0, readout_s=0.3)
    planned = [(Visit(number, number % 2, 0.0, 1.0), 1, 0) for number in range(visits)]
    began_ns = clock.now_ns()
    if overlapped:
        for _ in perform(planned, bench.devices, bench.sink, clock):
            pass
    else:
        for one in planned:
            for _ in perform([one], bench.devices, bench.sink, clock):
                pass
    return visits * 1e9 / (clock.now_ns() - began_ns)


class _Digitiser:
    """Answers DATA? with a block of 4 MB."""

    reply = b"#74000000" + np.random.default_rng(1).bytes(4_000_000) + b"\n"

    def session(self, send: Send) -> Session:
        return self

    def feed(self, data: bytes) -> bytes:
        return b"LANTERN,DIGITISER,1,1\n" if b"*IDN?" in data else self.reply


def _digitise(told: Any) -> None:
    listener = Listener("tcp://127.0.0.1:0", _Digitiser())
    told.send(listener.address)
    run_real([listener], threading.Event())


def blocks() -> None:
    """Print how fast a block of 4 MB is read through our link, and through PyVISA's raw socket."""
    spawn = multiprocessing.get_context("spawn")
    here, there = spawn.Pipe()
    process = spawn.Process(target=_digitise, args=(there,), daemon=True)
    process.start()
    address = here.recv()
    with Link(RealClock(), address, Wire(timeout_s=60.0), "digitiser") as link:
        ours_s = statistics.median(timed(lambda: link.ask_block("DATA?", 5_000_000)) for _ in range(REPEATS))
    host, _, number = address.removeprefix("tcp://").partition(":")
    with pyvisa.ResourceManager("@py").open_resource(f"TCPIP::{host}::{number}::SOCKET") as visa:
        visa.timeout, visa.read_termination, visa.write_termination = 60_000, "\n", "\n"
        visa.query("*IDN?")
        visa_s = timed(lambda: visa.query_binary_values("DATA?", datatype="I", container=np.array))
    process.terminate()
    print(
        f"block of 4 MB: {4 / ours_s:.0f} MB/s, {visa_s / ours_s:.1f} times PyVISA's raw socket, "
        f"{4 / visa_s:.1f} MB/s"
    )


def duty() -> None:
    """Print live time against the ideal dwell / (dwell + move), virtual and real clock."""
    makers: dict[str, tuple[Callable[[], Clock], int]] = {
        "virtual": (lambda: VirtualClock(0), 200),
        "real": (RealClock, 15),
    }
    for name, (make, visits) in makers.items():
        ideal = visits / (visits + 0.5 * (visits - 1))  # the first opening is there already
        both = [live_fraction(make(), overlapped, visits) for overlapped in (True, False)]
        print(
            f"live time, {name} clock: {both[0] / ideal:.3f} of ideal, not overlapped {both[1] / ideal:.3f}, "
            f"ratio {both[0] / both[1]:.2f}",
            flush=True,
        )


if __name__ == "__main__":
    duty()
    round_trips()
    blocks()
    streams()
