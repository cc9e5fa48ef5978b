"""Storm: thousands of gates, hundreds of faults, every count with a number of its own.

python -m tests.studies.study_storm [gates] [share of spoilt replies]

In virtual time over TCP with waits as on a real bench; in real time over TCP, a serial port, RFC 2217 and
HiSLIP with waits a tenth of that, but for the longest: a busy computer is late too. The same storm is put on
a client that does not look before a command. Another storm asks a stage to move and compares true places.
"""

from __future__ import annotations

import logging
import sys
import tempfile
from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from daq.devices.clock import RealClock
from daq.devices.links import Link
from daq.devices.registry import open_devices
from daq.devices.wire import Wire
from daq.errors import DeviceError
from daq.ports import Clock
from simulators.bench import open_bench
from simulators.clock import VirtualClock
from simulators.hosts import serve
from tests.daq.devices.real import on_port
from tests.daq.devices.test_links import ADDRESS, BlindLink, Device, Fault
from tests.examples import lantern_rig

KINDS = ("silent", "half", "garbage", "doubled", "late", "late")
MOVE_KINDS = ("silent", "half", "garbage", "double", "late")
WIRE = Wire(identity="*IDN?", identity_reply=r"LANTERN,\w+,\d+")
QUICK = replace(WIRE, timeout_s=0.05, quiet_s=0.005, late_s=0.4)


@dataclass
class Outcome:
    """What a storm left."""

    injected: int = 0
    good: int = 0
    loud: int = 0
    wrong: int = 0

    def __str__(self) -> str:
        return (
            f"{self.injected:5} faults, {self.good:5} good, {self.loud:5} failed loudly, "
            f"{self.wrong:5} silently wrong"
        )


def spoilt(seed: int, share: float, least_s: float, most_s: float) -> dict[int, Fault]:
    """Return which replies are spoilt, and how: number of the line -> kind and lateness."""
    random = np.random.default_rng(seed)
    lines = np.flatnonzero(random.random(100_000) < share)
    return {int(one): (KINDS[random.integers(6)], float(random.uniform(least_s, most_s))) for one in lines}


def gates(clock: Clock, link: Link, device: Device, many: int, dwell_s: float) -> Outcome:
    """Count gates; each count is a number that no other gate has."""
    outcome = Outcome()
    for _ in range(many):
        try:
            link.ask("ARM", "ok")
            clock.sleep_until(clock.now_ns() + round(dwell_s * 1e9))
            while link.ask("BUSY?", "[01]", safe_to_repeat=True)[0] == "1":
                clock.sleep_until(clock.now_ns() + round(dwell_s * 1e7))
            number = link.ask("N?", r"\d+", safe_to_repeat=True)[0]
        except DeviceError:
            outcome.loud += 1
            continue
        if int(number) == device.asked[-1]:
            outcome.good += 1
        else:
            outcome.wrong += 1
    outcome.injected = sum(line <= device.lines for line in device.faults)
    return outcome


def virtual(make: Callable[..., Link], wire: Wire, many: int, share: float) -> Outcome:
    """Return what a storm leaves over TCP in virtual time, gates of 9 s."""
    clock = VirtualClock(0)
    device = Device(clock)
    with serve(clock, ADDRESS, device, "tcp"), make(clock, ADDRESS, wire, "counter") as link:
        device.faults = spoilt(1, share, 0.6, 1.2)
        return gates(clock, link, device, many, 9.0)


def real(kind: str, make: Callable[..., Link], wire: Wire, many: int, share: float) -> Outcome:
    """Return what the storm leaves on a real port."""
    clock = RealClock()
    device = Device(clock)
    with (
        tempfile.TemporaryDirectory() as folder,
        on_port(kind, device, Path(folder)) as port,
        make(clock, port.address, wire, "counter") as link,
    ):
        device.faults = spoilt(1, share, 0.06, 0.12)
        return gates(clock, link, device, many, 0.001)


def moves(many: int, share: float) -> Outcome:
    """Return what a storm leaves of moves of the Lantern bench, whose true places the bench knows.

    A move is wrong when nothing failed and the axis does not stand where it was sent.
    """
    rig, outcome = lantern_rig(), Outcome()
    script = {"seed": 2, "fault": [_fault(kind, 3600 * share) for kind in MOVE_KINDS]}
    bench = open_bench(rig, seed=1, transport="tcp", state=None, faults=script)
    clock, tolerance_mm = bench.clock, rig.axes["detector"].tolerance_mm
    with open_devices(rig, clock) as devices:
        stage = devices.detector
        stage.home()
        for place in range(many):
            target_mm = (place * 7 % 200) / 10 - 10
            try:
                clock.sleep_until(clock.now_ns() + round(stage.start(target_mm) * 1e9))
                seen = stage.state()
            except DeviceError:
                outcome.loud += 1
                continue
            true_mm = bench.truth_mm("detector")
            if seen.moving or abs(seen.encoder_mm - target_mm) > tolerance_mm:
                outcome.loud += 1  # the encoder says so
            elif abs(true_mm - target_mm) <= tolerance_mm:
                outcome.good += 1
            else:
                outcome.wrong += 1
        outcome.injected = sum(one.outcome == "struck" for one in bench.struck())
    bench.close()
    return outcome


def _fault(kind: str, per_hour: float) -> dict[str, Any]:
    late = {"seconds": 0.9} if kind == "late" else {}
    return {"kind": kind, "device": "stages", "per_hour": per_hour} | late


def main(many: int, share: float) -> None:
    """Print a line for every link and client."""
    logging.disable(logging.WARNING)
    blind = replace(WIRE, late_s=0.0)
    print(f"counts, virtual time, TCP              {virtual(Link, WIRE, many, share)}")
    print(f"counts, virtual time, without looking  {virtual(BlindLink, blind, many, share)}")
    print(f"positions, virtual time, TCP           {moves(many, share)}", flush=True)
    for kind in ("tcp", "serial", "rfc2217", "hislip"):
        print(f"counts, real time, {kind:8}            {real(kind, Link, QUICK, many, share)}", flush=True)
        quick = replace(QUICK, late_s=0.0)
        print(
            f"counts, real time, {kind:8} not looking {real(kind, BlindLink, quick, many, share)}", flush=True
        )


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 2000, float(sys.argv[2]) if len(sys.argv) > 2 else 0.05)
