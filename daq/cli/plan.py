"""Commands before a run: check and compose."""

from __future__ import annotations

import argparse
import tomllib
from dataclasses import asdict
from pathlib import Path

from daq.cli.answer import Answer
from daq.description import parse
from daq.description.dialect import dialect_warnings
from daq.devices.clock import RealClock
from daq.devices.files import read_dialect, with_dialects
from daq.devices.trial import tried
from daq.errors import DescriptionError
from daq.itinerary import Forecast, forecast
from daq.service.load import Wishes, load


def check(arguments: argparse.Namespace) -> Answer:
    """Read a measurement with its rig, a rig, or a dialect, and list every problem."""
    path: Path = arguments.file
    if _holds(path, "identity"):
        return _dialect(path, arguments)
    if arguments.address is not None:
        raise DescriptionError((f"{path}: only a dialect can be tried. Leave out --try.",))
    if _holds(path, "mask"):
        table, _ = with_dialects(tomllib.loads(path.read_text()), path.parent)
        rig = parse(table, str(path), "rig")
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


def _dialect(path: Path, arguments: argparse.Namespace) -> Answer:
    dialect, _ = read_dialect(path)
    warnings = dialect_warnings(dialect)
    lines = [f"dialect {dialect.name!r}, a {dialect.kind}: no problem found.", *warnings]
    understood: list[str] = []
    if arguments.address is not None:
        address = arguments.address if ":/" in arguments.address else f"tcp://{arguments.address}"
        understood += tried(dialect, address, arguments.letter, RealClock())
    ok = not any("not understood" in line for line in understood)
    figures = {"ok": ok, "problems": [], "warnings": list(warnings), "understood": understood}
    return Answer(0 if ok else 1, figures, [*lines, *understood])


def _holds(path: Path, key: str) -> bool:
    try:
        return key in tomllib.loads(path.read_text())
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
