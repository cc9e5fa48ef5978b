"""Commands that carry out a run: rehearse and run."""

from __future__ import annotations

import argparse
import signal
import sys
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import ExitStack, contextmanager
from dataclasses import replace
from pathlib import Path
from types import FrameType
from typing import Any, TextIO

from daq.cli.answer import Answer
from daq.cli.plan import wishes
from daq.errors import DescriptionError
from daq.estimate.stopping import GOAL
from daq.itinerary import Itinerary
from daq.records import Reading
from daq.report import lines
from daq.service.asked import Asked
from daq.service.drift import with_drift
from daq.service.ending import REASONS
from daq.service.equip import Wanted
from daq.service.figures import figures_of
from daq.service.load import Loaded, config_dir, load
from daq.service.night import COMPLETE
from daq.service.outlets import Outlets, outlets_of_run
from daq.service.owner import refuse_owned
from daq.service.page import PageProcess, make_lab
from daq.service.progress import Progress
from daq.service.start import begin, resume
from daq.storage.probe import durable_write_s
from daq.storage.reader import read_meta


def rehearse(arguments: argparse.Namespace) -> Answer:
    """Carry out a run on simulated hardware in virtual time."""
    return _carry_out(arguments, arguments.link, arguments.file or config_dir() / "lantern.toml")


def run(arguments: argparse.Namespace) -> Answer:
    """Carry out a run on the real clock."""
    if arguments.file is None and arguments.resume is None:
        raise DescriptionError(("tercet run: name a measurement file, or a run with --resume.",))
    return _carry_out(arguments, "", arguments.file)


def _refuse_other_clock(folder: Path, command: str) -> None:
    """Raise DescriptionError when a run would go on with the devices of the other command."""
    theirs = "rehearse" if read_meta(folder).get("clock") == "virtual" else "run"
    if command != theirs:
        raise DescriptionError(
            (f"{folder}: `tercet {theirs}` began it, on other devices. Use `tercet {theirs} --resume`.",)
        )


def _carry_out(arguments: argparse.Namespace, transport: str, file: Path) -> Answer:
    loaded = None if arguments.resume else _loaded(arguments, file)
    lab = arguments.resume.resolve().parents[1] if arguments.resume else arguments.into
    refuse_owned(lab)
    if arguments.resume:
        _refuse_other_clock(arguments.resume, "run" if not transport else "rehearse")
    began_s = time.monotonic()
    with ExitStack() as stack:
        page = show_page(stack, lab, sys.stderr if arguments.json else sys.stdout) if arguments.page else None
        watch = Watch()
        outlets = None if transport else stack.enter_context(outlets_of_run(lab))
        with interrupts() as asked:
            wanted = Wanted(transport, getattr(arguments, "home", False), asked, watch.begins, watch.took)
            wanted = wanted if outlets is None else _told_outside(wanted, outlets)
            folder, ended = begin(loaded, lab, wanted) if loaded else resume(arguments.resume, wanted)
        watch.done()
        figures = figures_of(folder)
        figures |= {
            "wall_s": time.monotonic() - began_s,
            "speed_up": watch.run_s / watch.wall_s if watch.wall_s else None,
            "durable_write_s": durable_write_s(folder),
        }
        answer = Answer(0 if ended in (COMPLETE, REASONS[GOAL]) else 1, figures, _told(figures, watch))
        if page is not None and not arguments.json and sys.stdout.isatty():
            print("\n".join(answer.lines))
            answer = Answer(answer.status, figures)
            _stay(page)
    return answer


def _told_outside(wanted: Wanted, outlets: Outlets) -> Wanted:
    """Return wishes that also tell the world, as a service does."""
    calls = outlets.wishes()

    def begins(folder: Path, itinerary: Itinerary) -> None:
        wanted.on_start(folder, itinerary)
        outlets.begins(itinerary)

    def took(reading: Reading) -> None:
        wanted.on_visit(reading)
        calls["on_visit"](reading)

    return replace(wanted, **calls | {"on_start": begins, "on_visit": took})


def _loaded(arguments: argparse.Namespace, file: Path) -> Loaded:
    loaded = load(file, wishes(arguments), getattr(arguments, "rig", None))
    drift = getattr(arguments, "drift", None)
    loaded = loaded if drift is None else with_drift(loaded, drift)
    faults = getattr(arguments, "faults", None)
    return loaded if faults is None else loaded.with_faults(faults)


class Watch:
    """What a terminal sees of a run, and how long it took."""

    def __init__(self) -> None:
        self._progress: Progress | None = None
        self._began_s = self.wall_s = self.run_s = 0.0
        self._first_ns: int | None = None

    def begins(self, folder: Path, itinerary: Itinerary) -> None:
        """Say where the run is kept."""
        print(f"run: {folder}", file=sys.stderr)
        self._progress = Progress(len(itinerary))
        self._began_s = time.monotonic()

    def took(self, reading: Reading) -> None:
        """Take in a reading."""
        if self._first_ns is None:
            self._first_ns = reading.gate_open_ns
        self.run_s = (reading.gate_close_ns - self._first_ns) / 1e9
        if self._progress:
            self._progress.took(reading)

    def done(self) -> None:
        """Take the time."""
        self.wall_s = time.monotonic() - self._began_s
        if self._progress:
            self._progress.done()


def _told(figures: dict[str, Any], watch: Watch) -> list[str]:
    virtual = figures["kind"] == "rehearsal" and figures["speed_up"]
    faster = f", {figures['speed_up']:.0f} times as fast as the real clock" if virtual else ""
    durable = f"a durable write costs {1e3 * figures['durable_write_s']:.2f} ms here"
    return [*lines(figures), f"took {watch.wall_s:.1f} s{faster}; {durable}"]


def show_page(stack: ExitStack, lab: Path, stream: TextIO, options: Sequence[str] = ()) -> PageProcess:
    """Start the page of a lab for as long as a stack lasts, and print its address."""
    make_lab(lab)
    page = stack.enter_context(PageProcess(lab, options))
    print(f"page: {page.address}", file=stream, flush=True)
    return page


def _stay(page: PageProcess) -> None:
    print(f"The page stays at {page.address} until Ctrl-C.")
    try:
        page.wait()
    except KeyboardInterrupt:
        print()


@contextmanager
def interrupts() -> Iterator[Asked]:
    """Ctrl-C once: end after this stand; twice, or SIGTERM: stop and park."""
    asked = Asked()

    def interrupted(number: int, _: FrameType | None) -> None:
        asked.stop = asked.stop or asked.leave or number == signal.SIGTERM
        asked.leave = True
        asked.by_system = asked.by_system or number == signal.SIGTERM
        if asked.stop and asked.interruptible:
            raise KeyboardInterrupt
        if asked.stop:
            return
        print("\nending after this stand; Ctrl-C again stops at once", file=sys.stderr)

    before: dict[int, Callable[..., Any] | int | None] = {
        number: signal.signal(number, interrupted) for number in (signal.SIGINT, signal.SIGTERM)
    }
    try:
        yield asked
    finally:
        for number, handler in before.items():
            signal.signal(number, handler)
