"""Commands for a run that is going on: status, log, hold, resume, end."""

from __future__ import annotations

import argparse
import getpass
import os
import sys
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from daq.cli.answer import Answer
from daq.errors import DescriptionError
from daq.estimate.blinding import Blinding
from daq.report.numbers import with_error
from daq.service.requests import ask, current_run
from daq.storage.feed import read_feed
from daq.storage.lab import there
from daq.storage.lock import is_written
from daq.storage.log import read_log

NO_SAFETY = "This is a request to the program, no safety function."
BROKEN_OFF = "broken off"
LONGEST_MUTE_MIN = 1440
BENCH_CAUTION = (
    "See with your own eyes that the cause is gone, that nothing is in the way of the stages, and that "
    "nobody is near them. Type: at the bench"
)


def status(arguments: argparse.Namespace) -> Answer:
    """Say how a run of a lab is getting on: the one that goes on, else the one written last."""
    name = arguments.run or current_run(there(arguments.lab))
    folder = arguments.lab / "runs" / name
    if name and not folder.is_dir():
        raise DescriptionError((f"lab {arguments.lab} has no run {name}.",))
    feed = read_feed(folder) if name else None
    if feed is None:
        return Answer(0, {"state": "none", "run": None, "since": None}, [f"{arguments.lab}: no run yet"])
    figures = {
        "state": feed["state"] if feed["ended"] or is_written(folder) else BROKEN_OFF,
        "run": feed["run"],
        "since": feed["started_utc"],
        "age_s": _age_s(feed["written_utc"]),
        **{key: feed[key] for key in ("kind", "visit", "ends_utc", "kappa", "blinding", "warnings", "ended")},
        **{key: feed.get(key) for key in ("holding", "in_doubt", "muted_until_utc")},
    }
    return Answer(0, figures, list(_status_lines(figures, arguments.lab)))


def log(arguments: argparse.Namespace) -> Answer:
    """Print what happened in a run."""
    entries = read_log(arguments.run)
    if not entries:
        from daq.storage.reader import read_meta

        read_meta(arguments.run)  # raises where there is no run: an empty log would hide a mistyped path
    return Answer(0, {"run": str(arguments.run), "log": entries}, [_log_line(entry) for entry in entries])


def hold(arguments: argparse.Namespace) -> Answer:
    """Ask a run to hold before the next stand."""
    return _asked(arguments, "hold", "holds before its next stand")


def resume(arguments: argparse.Namespace) -> Answer:
    """Ask a run that holds to go on; a hold for the bench needs a person who says that they stand there."""
    if not arguments.at_bench:
        return _asked(arguments, "resume", "goes on")
    if "SSH_CONNECTION" in os.environ:
        raise DescriptionError(("--at-bench is for the computer at the bench, not for a login from afar.",))
    print(BENCH_CAUTION, file=sys.stderr)
    if sys.stdin.readline().strip().lower() != "at the bench":
        return Answer(1, {"ok": False, "problems": ["not confirmed"]}, ["Not confirmed: nothing was asked."])
    return _asked(arguments, "resume-at-bench", "goes on", "home" if arguments.home else "")


def acknowledge(arguments: argparse.Namespace) -> Answer:
    """Say that you have seen a warning; with --mute-min nobody is called for so long."""
    if arguments.mute_min is not None:
        minutes = arguments.mute_min
        if not 0 < minutes <= LONGEST_MUTE_MIN:
            raise DescriptionError((f"--mute-min: above 0, up to {LONGEST_MUTE_MIN}, not {minutes:g}.",))
        return _asked(arguments, "mute", f"calls nobody for {minutes:g} min", f"{minutes:g}")
    which = arguments.warning or ""
    return _asked(arguments, "acknowledge", f"notes that you have seen {which or 'every warning'}", which)


def end(arguments: argparse.Namespace) -> Answer:
    """Ask a run to end after the present stand, or after the lap."""
    what = "end-after-lap" if arguments.after_lap else "end"
    return _asked(arguments, what, "ends after this lap" if arguments.after_lap else "ends after this stand")


def _asked(arguments: argparse.Namespace, what: str, promise: str, about: str = "") -> Answer:
    who = arguments.by or getpass.getuser()
    number, run = ask(arguments.lab, arguments.run, what, who, about)
    return Answer(0, {"request": number, "run": run, "what": what}, [f"asked: {run} {promise}. {NO_SAFETY}"])


def _age_s(utc: str) -> float:
    return (datetime.now(UTC) - datetime.fromisoformat(utc)).total_seconds()


def _status_lines(figures: dict[str, Any], lab: Path) -> Iterator[str]:
    visit, kappa = figures["visit"], figures["kappa"]
    place = f"visit {visit['number'] + 1} of {visit['of']}" if visit else "no visit yet"
    yield f"{figures['run']}: {figures['state']}, {place}{_end_words(figures)}"
    value = "not yet" if kappa["se"] is None else with_error(kappa["value"], kappa["se"])
    name = "kappa + offset" if Blinding(str(figures["blinding"])).hides else "kappa"
    yield f"{name} {value} after {kappa['pairs']} of {kappa['planned_pairs']} pairs"
    if figures["state"] == BROKEN_OFF:
        command = "rehearse" if figures["kind"] == "rehearsal" else "run"
        yield f"Nobody carries it out. Go on with: tercet {command} --resume {lab / 'runs' / figures['run']}"
    if figures["muted_until_utc"]:
        yield f"nobody is called before {figures['muted_until_utc']}"
    for one in figures["warnings"]:
        yield from _warning_lines(one)
    yield f"last word {figures['age_s']:.0f} s ago"


def _end_words(figures: dict[str, Any]) -> str:
    if figures["ended"]:
        return f", {figures['ended']['reason']}"
    return "" if figures["state"] == BROKEN_OFF else f", ends {figures['ends_utc']}"


def _warning_lines(one: dict[str, Any]) -> Iterator[str]:
    seen = one.get("acknowledged")
    yield f"! {one['what']} {one['good']}" + (f" (seen by {seen['by']})" if seen else "")
    yield f"  {one['did']} {one['do']} {one['cost']} (warning {one['id']})"


def _log_line(entry: dict[str, Any]) -> str:
    """Return an entry as prose where it has a sentence, else its fields."""
    head = f"{entry.get('utc', '')}  {entry['event']}"
    if "text" in entry:
        return f"{head}: {entry['text']}"
    rest = " ".join(f"{key}={value}" for key, value in entry.items() if key not in ("utc", "event", "run_ns"))
    return f"{head} {rest}".strip()
