"""Run the simulated instruments of a rig on real ports and the real clock: `python -m simulators RIG`."""

from __future__ import annotations

import argparse
import signal
import sys
import threading
import tomllib
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import Any

from daq.description import Rig, parse
from daq.devices.clock import RealClock
from daq.devices.files import with_dialects
from daq.errors import DaqError, DescriptionError
from simulators.bench import build
from simulators.faults import read_script
from simulators.hosts import run_real
from simulators.ports import listen
from simulators.settings import read_settings
from simulators.upsets import Upsets


def main(arguments: Sequence[str] | None = None) -> int:
    """Serve until SIGINT or SIGTERM and return the exit status; prints one line for each device."""
    reader = argparse.ArgumentParser(
        prog="python -m simulators", description="Simulated instruments on real ports."
    )
    reader.add_argument("rig", type=Path, help="rig file with a table [bench]")
    reader.add_argument("--faults", type=Path, metavar="FILE", help="fault script (TOML)")
    wanted = reader.parse_args(arguments)
    try:
        table, _ = with_dialects(_read(wanted.rig), wanted.rig.parent)
        faults = _read(wanted.faults) if wanted.faults else None
        _serve(parse(table, str(wanted.rig), "rig"), faults)
    except DaqError as error:
        sys.stderr.write(f"{error}\n")
        return error.exit_status
    return 0


def _serve(rig: Rig, faults: Mapping[str, Any] | None) -> None:
    settings, clock = read_settings(rig), RealClock()
    script = None if faults is None else read_script(faults, rig)
    upsets = None if script is None else Upsets(clock)
    built = build(rig, settings, settings.seed, clock, {}, upsets)
    try:
        listeners = {
            name: listen(address, instrument)
            for name, (address, instrument) in built.served(rig, clock).items()
        }
    except OSError as error:
        problem = f"rig {rig.name}: an address of [devices] cannot be listened on ({error}). Free its port."
        raise DescriptionError((problem,)) from error
    stop = threading.Event()
    for number in (signal.SIGINT, signal.SIGTERM):
        signal.signal(number, lambda *_: stop.set())
    for name, listener in listeners.items():
        sys.stdout.write(f"{name}: {listener.address}\n")
    sys.stdout.flush()
    if upsets and script:
        upsets.begin(script, listeners, built.instruments, built.tracks)
    run_real(tuple(listeners.values()), stop)


def _read(path: Path) -> dict[str, Any]:
    try:
        return tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise DescriptionError((f"{path}: it cannot be read as TOML ({error}). Mend the file.",)) from error


if __name__ == "__main__":
    sys.exit(main())
