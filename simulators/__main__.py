"""Run the simulated instruments of a rig on real ports and the real clock: `python -m simulators RIG`."""

from __future__ import annotations

import argparse
import signal
import sys
import threading
import tomllib
from collections.abc import Sequence
from pathlib import Path

from daq.description import Rig, parse
from daq.devices.clock import RealClock
from daq.errors import DaqError, DescriptionError
from simulators.bench import build
from simulators.hosts import Listener, run_real
from simulators.settings import read_settings


def main(arguments: Sequence[str] | None = None) -> int:
    """Serve until SIGINT or SIGTERM and return the exit status; prints one line for each device."""
    reader = argparse.ArgumentParser(
        prog="python -m simulators", description="Simulated instruments on real ports."
    )
    reader.add_argument("rig", type=Path, help="rig file with a table [bench]")
    wanted = reader.parse_args(arguments)
    try:
        _serve(_read(wanted.rig))
    except DaqError as error:
        sys.stderr.write(f"{error}\n")
        return error.exit_status
    return 0


def _serve(rig: Rig) -> None:
    settings = read_settings(rig)
    built = build(rig, settings, settings.seed, RealClock(), {})
    try:
        listeners = {
            name: Listener(rig.devices[name].address, instrument)
            for name, instrument in built.instruments.items()
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
    run_real(tuple(listeners.values()), stop)


def _read(path: Path) -> Rig:
    try:
        table = tomllib.loads(path.read_text(encoding="utf-8"))
    except (OSError, ValueError) as error:
        raise DescriptionError((f"{path}: it cannot be read as TOML ({error}). Mend the file.",)) from error
    return parse(table, str(path), "rig")


if __name__ == "__main__":
    sys.exit(main())
