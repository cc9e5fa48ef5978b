"""Commands for a run that is going on: status, log, hold, resume, end."""

from __future__ import annotations

import argparse
import getpass
from datetime import UTC, datetime
from typing import Any

from daq.cli.answer import Answer
from daq.service.requests import ask
from daq.storage.feed import read_feed
from daq.storage.lab import runs, there
from daq.storage.log import read_log

NO_SAFETY = "This is a request to the program, no safety function."


def status(arguments: argparse.Namespace) -> Answer:
    """Say how the newest run of a lab is getting on."""
    found = runs(there(arguments.lab))
    feed = read_feed(found[-1]) if found else None
    if feed is None:
        return Answer(0, {"state": "none", "run": None, "since": None}, [f"{arguments.lab}: no run yet"])
    kappa = feed["kappa"]
    figures = {
        "state": feed["state"],
        "run": feed["run"],
        "since": feed["started_utc"],
        "age_s": _age_s(feed["written_utc"]),
        **{key: feed[key] for key in ("kind", "visit", "ends_utc", "kappa", "warnings", "ended")},
    }
    return Answer(0, figures, _status_lines(figures, kappa))


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
    """Ask a run that holds to go on."""
    return _asked(arguments, "resume", "goes on")


def end(arguments: argparse.Namespace) -> Answer:
    """Ask a run to end after the present stand, or after the lap."""
    what = "end-after-lap" if arguments.after_lap else "end"
    return _asked(arguments, what, "ends after this lap" if arguments.after_lap else "ends after this stand")


def _asked(arguments: argparse.Namespace, what: str, promise: str) -> Answer:
    number, run = ask(arguments.lab, arguments.run, what, arguments.by or getpass.getuser())
    return Answer(0, {"request": number, "run": run, "what": what}, [f"asked: {run} {promise}. {NO_SAFETY}"])


def _age_s(utc: str) -> float:
    return (datetime.now(UTC) - datetime.fromisoformat(utc)).total_seconds()


def _status_lines(figures: dict[str, Any], kappa: dict[str, Any]) -> list[str]:
    visit = figures["visit"]
    place = f"visit {visit['number'] + 1} of {visit['of']}" if visit else "no visit yet"
    value = "not yet" if kappa["se"] is None else f"{kappa['value']:+.2e} ± {kappa['se']:.1e}"
    return [
        f"{figures['run']}: {figures['state']}, {place}, ends {figures['ends_utc']}",
        f"kappa {value} after {kappa['pairs']} of {kappa['planned_pairs']} pairs",
        *(f"! {warning['what']} {warning['good']}" for warning in figures["warnings"]),
        f"last word {figures['age_s']:.0f} s ago",
    ]


def _log_line(entry: dict[str, Any]) -> str:
    rest = " ".join(f"{key}={value}" for key, value in entry.items() if key not in ("utc", "event", "run_ns"))
    return f"{entry.get('utc', '')} {entry['event']} {rest}".strip()
