"""How long a stop takes to reach a stage: from a thread, beside a silent device, by SIGTERM, by the guard.

python -m tests.studies.study_stop [trials]

Times depend on what else the computer does; a bare wake-up of a process, measured in the same run, stands
beside them.
"""

from __future__ import annotations

import os
import signal
import statistics
import sys
import tempfile
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from pathlib import Path

from daq.devices.clock import RealClock
from daq.devices.links import Link
from daq.devices.wire import Wire
from daq.errors import DeviceError
from simulators.motion import Track
from simulators.stages import StageController, Travel
from tests.daq.devices.real import on_port
from tests.daq.devices.test_guard import Bench, Stops

WIRE = Wire(identity="M100", identity_reply=r"\S+ \d+ axes [A-Z]+")
SILENT_S = 1.5  # timeout and repeats of the silent device
WAIT_S = 30.0


def wake_up_s() -> float:
    """Return how long another process needs to wake up on a pipe, there and back, halved."""
    (here_in, there_out), (there_in, here_out) = os.pipe(), os.pipe()
    child = os.fork()
    if child == 0:
        os.write(there_out, os.read(there_in, 1))
        os._exit(0)
    time.sleep(0.02)
    began_s = time.monotonic()
    os.write(here_out, b"1")
    os.read(here_in, 1)
    took_s = (time.monotonic() - began_s) / 2
    os.waitpid(child, 0)
    for end in (here_in, there_out, there_in, here_out):
        os.close(end)
    return took_s


@contextmanager
def controller(kind: str) -> Iterator[tuple[Stops, Link]]:
    """Give a controller on a real port and a link to it."""
    clock = RealClock()
    stages = Stops(
        StageController({"X": Track(0.0, 0.0, homed=True)}, {"X": Travel((0.0, 20.0), 1.0)}, clock)
    )
    with (
        tempfile.TemporaryDirectory() as folder,
        on_port(kind, stages, Path(folder)) as port,
        Link(clock, port.address, WIRE, kind) as link,
    ):
        yield stages, link


def stopped_after_s(stages: Stops, stop: Callable[[], object]) -> float:
    """Return how long it took from asking until the controller had the stop."""
    stages.stopped.clear()
    began_s = time.monotonic()
    stop()
    assert stages.stopped.wait(WAIT_S)
    return stages.stopped_s - began_s


def during_a_dwell(kind: str, trials: int) -> list[float]:
    with controller(kind) as (stages, link):
        return [stopped_after_s(stages, lambda: link.send_now(b"M0\n")) for _ in range(trials)]


def during_a_move(kind: str, trials: int) -> list[float]:
    """Another thread asks the status all the time."""
    with controller(kind) as (stages, link):
        over = threading.Event()

        def poll() -> None:
            while not over.is_set():
                try:
                    link.ask("M101", ".*")
                except DeviceError:
                    continue

        thread = threading.Thread(target=poll, daemon=True)
        thread.start()
        took_s = []
        for _ in range(trials):
            time.sleep(0.05)
            took_s.append(stopped_after_s(stages, lambda: link.send_now(b"M0\n")))
        over.set()
        thread.join()
    return took_s


def beside_a_silent_one(kind: str, trials: int) -> list[float]:
    """Another thread waits for a device that says nothing, over the very link that is to carry the stop."""
    with controller(kind) as (stages, link):
        note = stages.change
        stages.change = lambda message, reply: b"" if message == "M101" else note(message, reply)
        took_s = []
        for _ in range(trials):
            failed = threading.Thread(target=_ask_in_vain, args=(link,), daemon=True)
            failed.start()
            time.sleep(0.05)
            took_s.append(stopped_after_s(stages, lambda: link.send_now(b"M0\n")))
            failed.join()
    return took_s


def _ask_in_vain(link: Link) -> None:
    try:
        link.ask("M101", "axes.*", timeout_s=SILENT_S)
    except DeviceError:
        return


def by_a_signal(kind: str, number: int, how: str, trials: int) -> list[float]:
    took_s = []
    for _ in range(trials):
        with ExitStack() as stack:
            folder = Path(stack.enter_context(tempfile.TemporaryDirectory()))
            bench = Bench(stack, kind, folder)
            with bench.start(how) as program:
                time.sleep(1.0)  # the guard has been there since long
                took_s.append(stopped_after_s(bench.stages, lambda: program.send_signal(number)))
                program.communicate()
    return took_s


def told(name: str, took_s: Sequence[float]) -> str:
    quick = sum(one <= 0.1 for one in took_s)
    return (
        f"{name:44} median {1e3 * statistics.median(took_s):7.1f} ms   worst {1e3 * max(took_s):7.1f} ms   "
        f"{quick} of {len(took_s)} within 100 ms"
    )


def main(trials: int) -> None:
    """Print a line for every way to stop."""
    print(told("bare wake-up of a process", [wake_up_s() for _ in range(trials)]))
    for kind in ("tcp", "serial", "rfc2217"):
        print(told(f"{kind}: during a dwell", during_a_dwell(kind, trials)))
        print(told(f"{kind}: during a move, status asked", during_a_move(kind, trials)))
        silent = beside_a_silent_one(kind, trials)
        print(told(f"{kind}: past a silent device", silent))
        print(f"{'':44} worst is {max(silent) / SILENT_S:.3f} of the silent device's {SILENT_S:g} s")
    for kind in ("tcp", "serial"):
        print(told(f"{kind}: SIGTERM, handler", by_a_signal(kind, signal.SIGTERM, "handler", trials)))
        print(told(f"{kind}: SIGTERM, guard", by_a_signal(kind, signal.SIGTERM, "wait", trials)))
        print(told(f"{kind}: kill -9, guard", by_a_signal(kind, signal.SIGKILL, "wait", trials)))


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 20)
