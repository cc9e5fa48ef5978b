"""Commands before a run: check and compose."""

from __future__ import annotations

import argparse
import tomllib
from dataclasses import asdict
from pathlib import Path

from daq.cli.answer import Answer
from daq.description import parse
from daq.itinerary import Forecast, forecast
from daq.service.load import Wishes, load


def check(arguments: argparse.Namespace) -> Answer:
    """Read a measurement with its rig, or a rig, and list every problem."""
    path: Path = arguments.file
    if _is_rig(path):
        rig = parse(tomllib.loads(path.read_text()), str(path), "rig")
        return _fine(f"rig {rig.name!r}: {len(rig.slits)} slits, {len(rig.devices)} devices")
    loaded = load(path)
    return _fine(
        f"measurement {loaded.measurement.name!r} on rig {loaded.rig.name!r}: "
        f"{len(loaded.itinerary())} visits"
    )


def plan(arguments: argparse.Namespace) -> Answer:
    """Compose the itinerary and print what it will bring."""
    loaded = load(arguments.file, wishes(arguments))
    expected = forecast(loaded.itinerary(), loaded.measurement)
    return Answer(0, asdict(expected), _forecast_lines(expected, loaded.measurement.estimate.goal_se))


def wishes(arguments: argparse.Namespace) -> Wishes:
    """Return what the command line changes of the description."""
    return Wishes(arguments.hours, arguments.seed, arguments.order)


def _is_rig(path: Path) -> bool:
    try:
        return "mask" in tomllib.loads(path.read_text())
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError):
        return False  # `load` says what is wrong with it


def _fine(text: str) -> Answer:
    return Answer(0, {"ok": True, "problems": []}, [f"{text}. No problem found."])


def _forecast_lines(expected: Forecast, goal_se: float | None) -> list[str]:
    return [
        f"{expected.visits} visits, {expected.laps} laps, {expected.pairs} pairs",
        f"{expected.total_s / 3600:.2f} h in all, {expected.live_s / 3600:.2f} h live "
        f"(duty {100 * expected.duty:.1f} %)",
        f"kappa will come out at ± {expected.kappa_se:.2e} "
        f"(counting alone ± {expected.kappa_counting_se:.2e})",
        f"Q = {expected.q:.2f}: this much longer than an ideal night without moves and drift",
        *_goal_line(expected, goal_se),
    ]


def _goal_line(expected: Forecast, goal_se: float | None) -> list[str]:
    if goal_se is None or expected.goal_s is None:
        return []
    hours = expected.goal_s / 3600
    if expected.goal_s <= expected.total_s:
        return [f"The goal of ± {goal_se:.2e} is met after {hours:.1f} h."]
    return [f"The goal of ± {goal_se:.2e} is not met: it would take {hours:.1f} h in all."]
