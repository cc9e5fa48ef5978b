"""Commands before a run: check."""

from __future__ import annotations

import argparse
import tomllib
from pathlib import Path

from daq.cli.answer import Answer
from daq.description import Rig
from daq.description.address import address_problem
from daq.description.dialect import dialect_warnings
from daq.devices.clock import RealClock
from daq.devices.files import read_dialect
from daq.devices.registry import device_problems
from daq.devices.trial import tried
from daq.errors import DescriptionError
from daq.itinerary import Forecast, Itinerary, forecast
from daq.itinerary.advice import hopeless
from daq.service.extensions import open_bench
from daq.service.load import Loaded, Wishes, load, load_rig


def check(arguments: argparse.Namespace) -> Answer:
    """Read a measurement with its rig, a rig, or a dialect, and list every problem."""
    path: Path = arguments.file
    if _holds(path, "identity"):
        return _dialect(path, arguments)
    if arguments.address is not None:
        raise DescriptionError((f"{path}: only a dialect can be tried. Leave out --try.",))
    if _holds(path, "mask"):
        rig = load_rig(path)
        _refuse_devices(rig)
        return _fine(f"rig {rig.name!r}: {len(rig.slits)} slits, {len(rig.devices)} devices")
    loaded = load(path)
    _refuse_devices(loaded.rig)
    itinerary = loaded.itinerary()
    refuse_hopeless(loaded, itinerary, forecast(itinerary, loaded.measurement), path)
    return _fine(
        f"measurement {loaded.measurement.name!r} on rig {loaded.rig.name!r}: {len(itinerary)} visits"
    )


def _refuse_devices(rig: Rig) -> None:
    """Refuse devices that no driver knows or that lack a port, and a simulated bench that cannot be meant."""
    problems = device_problems(rig)
    if problems:
        raise DescriptionError(problems)
    if rig.bench is not None:
        open_bench(rig, seed=None, transport="direct", state=None, faults=None).close()


def refuse_hopeless(loaded: Loaded, itinerary: Itinerary, expected: Forecast, file: Path) -> None:
    """Refuse a goal that would take longer than anybody measures.

    Raises
    ------
    DescriptionError
        With the hours that it would take, what the plan gives, and what would help.
    """
    sentence = hopeless(loaded.measurement, loaded.rig, itinerary, expected)
    if sentence is not None:
        raise DescriptionError((f"{file}, estimate.goal_se: {sentence}",))


def wishes(arguments: argparse.Namespace) -> Wishes:
    """Return what the command line changes of the description."""
    return Wishes(arguments.hours, arguments.seed, arguments.order)


def _dialect(path: Path, arguments: argparse.Namespace) -> Answer:
    dialect, _ = read_dialect(path)
    warnings = dialect_warnings(dialect)
    lines = [f"dialect {dialect.name!r}, a {dialect.kind}: no problem found.", *warnings]
    understood: list[str] = []
    if arguments.address is not None:
        known = ("tcp:", "socket:", "rfc2217:", "serial:", "visa:")
        address = arguments.address if arguments.address.startswith(known) else f"tcp://{arguments.address}"
        if problem := address_problem(address):
            raise DescriptionError((f"--try {arguments.address}: {problem}.",))
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
