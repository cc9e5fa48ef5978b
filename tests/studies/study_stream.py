"""Stream: millions of events a second for minutes, every one of them in the archive, memory flat.

python -m tests.studies.study_stream [seconds] [events a second] [folder]

A source in a process of its own, with a buffer of 4 MB, marks what it has to throw away. It sends gate after
gate of a second without a pause: while one is committed, the next one comes. At the end the archive is
finished, and every gate's events are compared with what the source sent.
"""

from __future__ import annotations

import multiprocessing
import os
import socket
import sys
import tempfile
import threading
import time
from dataclasses import replace
from multiprocessing.connection import Connection
from pathlib import Path

import numpy as np

from daq.devices.clock import RealClock
from daq.devices.events import U32, times_of
from daq.devices.intake import Form, Intake
from daq.records import Reading
from daq.storage.events import read_events
from daq.storage.layout import EVENT_CHUNK
from daq.storage.reader import open_visits
from daq.storage.run import Archive
from simulators.listmode import StreamSource, example_words
from tests.daq.storage.example import reading, started

CHANNELS, SLICES = 2, 10
PER_ROLL = 168_000
PATIENCE_S = 60


def body(rate_hz: int) -> bytes:
    """Return the words of one gate of a second."""
    return example_words(U32, rate_hz, PER_ROLL, CHANNELS, seed=1)


def source(told: Connection, rate_hz: int, gates: int) -> None:
    """Listen, say where, send gates to who connects, and tell how many events went out and were lost."""
    sending = StreamSource(body(rate_hz), U32, rate_hz)
    with socket.create_server(("127.0.0.1", 0)) as server:
        told.send(server.getsockname()[1])
        client, _ = server.accept()
        with client:
            told.recv()  # no gate is opened before the counter's driver is ready
            sending.run(client, threading.Event(), gates)
            told.send((sending.sent, sending.lost))
            told.recv()


def resident_mb() -> float:
    """Return how much memory this process has now [MB]."""
    pages = int(Path("/proc/self/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") / 1e6


def taken(
    archive: Archive, intake: Intake, clock: RealClock, example: Reading, gates: int
) -> tuple[int, int, list[float]]:
    """Commit every gate; return events, losses, and the memory after each gate [MB]."""
    many, lost, memory = 0, 0, list[float]()
    for number in range(1, gates + 1):
        gate = intake.take(number, clock.now_ns() + PATIENCE_S * 10**9)
        events = int(gate.binned.counts.sum()) + gate.binned.outside
        archive.commit(replace(example, attempt=number, events=gate.packed()))
        many, lost = many + events, lost + gate.binned.lost
        memory.append(resident_mb())
        if number % 30 == 0:
            print(f"  {number} gates, {many} events, {lost} lost, {memory[-1]:.0f} MB", flush=True)
    return many, lost, memory


def study(folder: Path, gates: int, rate_hz: int) -> None:
    """Print what came, what was lost, how memory went, and whether the archive holds every event."""
    clock, spawn = RealClock(), multiprocessing.get_context("spawn")
    here, there = spawn.Pipe()
    sender = spawn.Process(target=source, args=(there, rate_hz, gates), daemon=True)
    sender.start()
    connection = clock.connect(f"tcp://127.0.0.1:{here.recv()}", 10.0)
    intake = Intake(clock, connection, Form(U32, CHANNELS, SLICES), "stream")
    intake.ticks = (-(-rate_hz // PER_ROLL) << U32.tag_bits) // SLICES + 1
    example = reading(0)
    with started(folder / "run", laps=200, tick_s=1e-9 / CHANNELS, event_chunk=EVENT_CHUNK) as archive:
        own_s, began_s = time.process_time(), time.monotonic()
        here.send(None)
        many, lost, memory = taken(archive, intake, clock, example, gates)
        own_s, took_s = time.process_time() - own_s, time.monotonic() - began_s
        sent = here.recv()
        here.send(None)
        intake.close()
        archive.finish({})
    kept, wrong = compared(folder / "run", gates, rate_hz)
    size = sum(file.stat().st_size for file in (folder / "run").rglob("*") if file.is_file())
    print(f"{took_s:.0f} s at {rate_hz / 1e6:g} M/s: {many} of {sent[0]} came; {sent[1]} lost, {lost} marked")
    print(f"archive: {kept} events in {size / 1e9:.2f} GB; {wrong} of the compared gates differ")
    print(f"memory: {memory[9]:.0f} MB after 10 gates, most {max(memory):.0f}, at the end {memory[-1]:.0f}")
    print(f"{100 * own_s / took_s:.0f} % of one core; load {os.getloadavg()[0]:.1f}")


def compared(run: Path, gates: int, rate_hz: int) -> tuple[int, int]:
    """Return how many events the archive holds, and how many of every tenth gate differ from the source's."""
    words = np.frombuffer(body(rate_hz), U32.dtype)[1:-1]
    right = times_of(words, U32, 0, CHANNELS).astype(np.int64)
    right.sort(kind="stable")
    kept = int(open_visits(run)["event_count"].values.sum())
    wrong = sum(not np.array_equal(read_events(run, [row])[0], right) for row in range(0, gates, 10))
    return kept, wrong


def main(arguments: list[str]) -> None:
    """Read the arguments and go."""
    gates = int(arguments[0]) if arguments else 600
    rate_hz = int(float(arguments[1])) if len(arguments) > 1 else 5_000_000
    with tempfile.TemporaryDirectory(dir=arguments[2] if len(arguments) > 2 else None) as folder:
        study(Path(folder), gates, rate_hz)


if __name__ == "__main__":
    main(sys.argv[1:])
