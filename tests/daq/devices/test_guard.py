"""The guard stops the stages when the program dies, and only then (how fast: tests/studies/study_stop.py)."""

from __future__ import annotations

import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack
from pathlib import Path

import pytest

from daq.devices import guard
from daq.devices.clock import RealClock
from simulators.counters import GatedCounter
from simulators.hosts import Instrument
from simulators.motion import Track
from simulators.sensors import RoomSensor
from simulators.stages import StageController, Travel
from tests.daq.devices.real import Port, on_port
from tests.daq.devices.scripted import Scripted

WAIT_S = 60.0


class Stops(Scripted):
    """Notes when it was asked to stop."""

    def __init__(self, inner: Instrument) -> None:
        super().__init__(inner)
        self.stopped, self.stopped_s = threading.Event(), 0.0
        self.change = self._note

    def _note(self, message: str, reply: bytes) -> bytes:
        if "M0" in message.splitlines():  # a serial port may bring it with the command before
            self.stopped_s = time.monotonic()
            self.stopped.set()
        return reply


class Bench:
    """The Lantern rig's instruments on real ports, its axes homed, and slow."""

    def __init__(self, stack: ExitStack, kind: str, folder: Path) -> None:
        clock = RealClock()
        tracks = {letter: Track(0.0, 0.0, homed=True) for letter in "XY"}
        travel = {letter: Travel((-15.0, 20.0), 32.0) for letter in "XY"}
        self.stages = Stops(StageController(tracks, travel, clock))
        others: list[Instrument] = [
            GatedCounter("counter", lambda open_ns, close_ns: (1,), 0.1, clock),
            RoomSensor("room", clock),
        ]
        ports: list[Port] = [stack.enter_context(on_port(kind, self.stages, folder))]
        ports += [stack.enter_context(on_port("tcp", other, folder)) for other in others]
        self.words = [sys.executable, "-m", "tests.daq.devices.engine", *(port.address for port in ports)]

    def start(self, how: str) -> subprocess.Popen[str]:
        process = subprocess.Popen(
            [*self.words, how], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
        )
        assert process.stdout is not None
        assert process.stdout.readline() == "moving\n"
        return process


@pytest.fixture
def bench(request: pytest.FixtureRequest, tmp_path: Path) -> Iterator[Bench]:
    with ExitStack() as stack:
        yield Bench(stack, getattr(request, "param", "tcp"), tmp_path)


@pytest.mark.parametrize("bench", ["tcp", "serial"], indirect=True)
def test_a_killed_program_leaves_no_stage_moving(bench: Bench) -> None:
    with bench.start("wait") as program:
        program.kill()

        assert bench.stages.stopped.wait(WAIT_S)
        assert "stop sent to stages" in program.communicate()[1]


@pytest.mark.parametrize("how", ["raise", "sigterm"])
def test_a_program_that_ends_as_nobody_foresaw_leaves_no_stage_moving(bench: Bench, how: str) -> None:
    with bench.start(how) as program:
        if how == "sigterm":
            program.send_signal(signal.SIGTERM)

        assert bench.stages.stopped.wait(WAIT_S)
        program.communicate()


def test_a_program_that_says_goodbye_is_not_stopped(bench: Bench) -> None:
    with bench.start("end") as program:
        said = program.communicate(timeout=WAIT_S)[1]

    assert "guard" not in said
    assert not bench.stages.stopped.is_set()


def test_a_controller_that_nobody_reaches_holds_up_no_other(bench: Bench) -> None:
    orders = [
        guard.StopOrder("gone", "tcp://127.0.0.1:1", "M0\n"),
        guard.StopOrder("stages", bench.words[3], "M0\n"),
    ]

    with pytest.raises(RuntimeError), guard.guarded() as beside:
        beside.watch_over(orders)
        raise RuntimeError

    assert bench.stages.stopped.wait(WAIT_S)
    assert beside.process.returncode == 1


def test_stages_that_another_program_holds_are_not_stopped(bench: Bench) -> None:
    with pytest.raises(RuntimeError), guard.guarded() as beside:
        raise RuntimeError  # before the stages were ours

    assert beside.process.returncode == 0
    assert not bench.stages.stopped.is_set()


def test_it_says_that_it_is_no_safety_function() -> None:
    assert "no safety function" in (guard.__doc__ or "")
