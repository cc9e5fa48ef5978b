"""A program that moves a stage and may die: `python -m tests.daq.devices.engine ADDRESS HOW`."""

from __future__ import annotations

import signal
import sys
import threading
from types import FrameType

from daq.devices.clock import RealClock
from daq.devices.registry import open_devices
from tests.examples import lantern_rig


def _terminated(number: int, frame: FrameType | None) -> None:
    raise KeyboardInterrupt


def main(stages: str, counter: str, room: str, how: str) -> None:
    rig = lantern_rig(
        devices__stages__address=stages, devices__counter__address=counter, devices__room__address=room
    )
    with open_devices(rig, RealClock()) as devices:
        devices.detector.start(15.0)
        sys.stdout.write("moving\n")
        sys.stdout.flush()
        if how == "wait":
            threading.Event().wait()
        if how == "raise":
            raise RuntimeError("a bug")
        if how == "sigterm":
            signal.pause()
        if how == "handler":
            signal.signal(signal.SIGTERM, _terminated)
            try:
                threading.Event().wait()
            except KeyboardInterrupt:
                devices.detector.stop_now()


if __name__ == "__main__":
    main(*sys.argv[1:])
