"""The command task: what a person does at the bench."""

from __future__ import annotations

import argparse
import contextlib
import select
import sys
from collections.abc import Iterator
from functools import partial

from daq.cli.answer import Answer
from daq.description import Rig
from daq.errors import DaqError, DescriptionError
from daq.service.at_bench import in_hand, refuse_absent, turned
from daq.service.bench_task import Person, carry_out
from daq.service.load import Loaded, load, load_rig
from daq.tasks import task_of
from daq.tasks.by_hand import Bench, halt, obey

BY_HAND = "by-hand"


def task(arguments: argparse.Namespace) -> Answer:
    """Carry out a bench task, or let a person home, move, read and watch the rate."""
    return _by_hand(arguments) if arguments.name == BY_HAND else _measured(arguments)


def _measured(arguments: argparse.Namespace) -> Answer:
    """Carry out a task that measures, and say what it found."""
    loaded, chosen = _loaded(arguments), task_of(arguments.name)
    refuse_absent(loaded.rig, _typed)
    person = Person(arguments.by or "", _say, partial(turned, _typed, _say))
    record = carry_out(chosen, loaded, arguments.into, person)
    lines = [f"{record['verdict']}: {record['sentence']}"]
    if record["valid_until"]:
        lines.append(
            f"valid until {record['valid_until'][:16].replace('T', ' ')} UTC, "
            f"or another {' or '.join(record['holds_for'])}"
        )
    lines.append(f"record {record['record']}, picture {record['picture']}")
    return Answer(0 if record["ok"] else 1, record, lines)


def _loaded(arguments: argparse.Namespace) -> Loaded:
    """Return the description, with the fault script of a simulated bench.

    Raises
    ------
    DescriptionError
        For a fault script with real devices.
    """
    loaded = load(arguments.file)
    if arguments.faults is None:
        return loaded
    if not loaded.rig.simulated:
        raise DescriptionError(
            (f"--faults {arguments.faults}: the devices of {loaded.rig.name} are real. Leave it out.",)
        )
    return loaded.with_faults(arguments.faults)


def _by_hand(arguments: argparse.Namespace) -> Answer:
    """Let a person home, move, read and watch the rate at the bench."""
    rig = load_rig(arguments.file)
    refuse_absent(rig, _typed)
    done = list(_session(rig))
    figures = {"ok": all(one["ok"] for one in done), "task": arguments.name, "rig": rig.name, "done": done}
    return Answer(0 if figures["ok"] else 1, figures)


def _session(rig: Rig) -> Iterator[dict[str, object]]:
    """Yield what was typed and what came of it, until the end of what is typed."""
    watched = sys.stdin.isatty()
    with in_hand(rig) as (devices, clock):
        bench = Bench(devices, clock, _enter_waits if watched else lambda: False, watched)
        _say(f"{rig.name} is in your hands. Nothing is armed; limits hold. Type `help`, or `end` to leave.")
        while (line := _typed("by hand> ")) not in ("", "end\n"):
            if line.strip():
                yield {"line": line.strip(), **_carried_out(bench, line)}


def _carried_out(bench: Bench, line: str) -> dict[str, object]:
    """Return whether a line was carried out, and the last thing that was said."""
    last = ""
    try:
        for last in obey(bench, line):
            _say(last)
    except KeyboardInterrupt:
        for last in halt(bench):
            _say(last)
        return {"ok": False, "said": last}
    except DaqError as error:
        _say(str(error))
        return {"ok": False, "said": str(error)}
    return {"ok": True, "said": last.removeprefix("\r")}


def _say(text: str) -> None:
    """Write a line; one that begins with a carriage return goes over the one before, on a terminal."""
    over = text.startswith("\r")
    if over and sys.stderr.isatty():
        sys.stderr.write(f"\x1b[1A\r{text[1:]}\x1b[K\n")
    else:
        sys.stderr.write(f"{text.removeprefix(chr(13))}\n")
    sys.stderr.flush()


def _typed(question: str) -> str:
    """Return the line that a person types, with its end; "" when there is no more."""
    sys.stderr.write(question)
    sys.stderr.flush()
    with contextlib.suppress(KeyboardInterrupt):
        return sys.stdin.readline()
    return ""


def _enter_waits() -> bool:
    """Return whether Enter was pressed, and take it."""
    if not select.select([sys.stdin], [], [], 0)[0]:
        return False
    sys.stdin.readline()
    return True
