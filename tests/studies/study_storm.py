"""Storm: thousands of gates, hundreds of faults, every count with a number of its own.

python -m tests.studies.study_storm [gates] [share of spoilt replies] [counts|positions|late ...]

counts: in virtual time over TCP with waits as on a real bench; in real time over TCP, a serial port, RFC 2217
and HiSLIP with waits a tenth of that, but for the longest: a busy computer is late too. The same storm is put
on a client that does not look before a command. positions: a stage is asked to move, and true places are
compared. late: replies come later than the link was told that they can, so that they land between a question
and its answer, from a device that takes its time for every reply.
"""

from __future__ import annotations

import logging
import sys
import tempfile
import tomllib
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from daq.description import parse
from daq.description.device import DeviceEntry
from daq.description.rig import Axis
from daq.devices.clock import RealClock
from daq.devices.counter import ScpiCounter
from daq.devices.dialect import DialectStage
from daq.devices.links import Link
from daq.devices.registry import open_devices
from daq.devices.spoken import Spoken
from daq.devices.stage import SharedLink
from daq.devices.wire import Wire
from daq.errors import DeviceError
from daq.ports import Clock
from simulators.bench import open_bench
from simulators.clock import VirtualClock
from simulators.counters import Gate, GatedCounter
from simulators.hosts import Instrument, Send, Session, serve
from simulators.motion import Track
from simulators.stages import StageController, Travel
from tests.daq.devices.real import on_port
from tests.daq.devices.test_links import ADDRESS, BlindLink, Device, Fault
from tests.examples import CONFIGS, lantern_rig

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


class Slow:
    """An instrument whose every reply takes some time, and some are spoilt; a wrapper."""

    def __init__(self, inner: Instrument, clock: Clock, delay_s: float = 0.0) -> None:
        self.replies, self.faults = 0, dict[int, Fault]()
        self._inner, self._clock, self._delay_s = inner, clock, delay_s

    def session(self, send: Send) -> Session:
        """Return a session of the instrument behind it."""
        return _SlowSession(self, self._inner.session(send), send)

    def answer(self, reply: bytes, send: Send) -> bytes:
        """Return what is answered now; the rest comes later."""
        self.replies += bool(reply)
        kind, late_s = self.faults.get(self.replies, ("none", 0.0)) if reply else ("none", 0.0)
        spoilt = {"silent": b"", "half": reply[:-2], "garbage": b"\xff?\n", "doubled": reply * 2}
        data, wait_s = spoilt.get(kind, reply), late_s if kind == "late" else self._delay_s
        if wait_s and data:
            self._clock.call_at(self._clock.now_ns() + round(wait_s * 1e9), lambda: send(data))
            return b""
        return data


class _SlowSession:
    def __init__(self, slow: Slow, inner: Session, send: Send) -> None:
        self._slow, self._inner, self._send = slow, inner, send

    def feed(self, data: bytes) -> bytes:
        return self._slow.answer(self._inner.feed(data), self._send)


def real_moves(kind: str, many: int, share: float) -> Outcome:
    """Return what the storm leaves of moves of a stage on a real port, spoken to in a dialect."""
    clock, outcome = RealClock(), Outcome()
    track = Track(0.0, -20.0, homed=True)
    slow = Slow(StageController({"X": track}, {"X": Travel((-20.0, 20.0), 500.0)}, clock), clock)
    table = tomllib.loads((CONFIGS / "dialects" / "gcode-words.toml").read_text())
    table["link"] = table.get("link", {}) | {"late_s": QUICK.late_s, "quiet_s": QUICK.quiet_s}
    axis = Axis(device="stages", letter="X", limits_mm=(-20.0, 20.0), speed_mm_s=500.0, tolerance_mm=0.01)
    with tempfile.TemporaryDirectory() as folder, on_port(kind, slow, Path(folder)) as port:
        dialect = parse(table, "gcode-words.toml", "dialect")
        entry = DeviceEntry(
            driver="dialect", dialect=dialect, address=port.address, timeout_s=QUICK.timeout_s
        )
        spoken = Spoken("stages", entry, clock)
        stage = DialectStage("detector", axis, spoken, SharedLink(spoken.link), clock)
        stage.open()
        slow.faults = spoilt(2, share, 0.06, 0.12)
        for place in range(many):
            target_mm = (place * 7 % 200) / 10 - 10
            try:
                clock.sleep_until(clock.now_ns() + round(stage.start(target_mm) * 1e9) + 1_000_000)
                seen = stage.state()
            except DeviceError:
                outcome.loud += 1
                continue
            true_mm = track.true_mm(clock.now_ns())
            if seen.moving or abs(seen.encoder_mm - target_mm) > axis.tolerance_mm:
                outcome.loud += 1
            elif abs(true_mm - target_mm) <= axis.tolerance_mm:
                outcome.good += 1
            else:
                outcome.wrong += 1
        outcome.injected = sum(reply <= slow.replies for reply in slow.faults)
        stage.close()
    return outcome


def beyond(least_s: float, most_s: float, many: int, share: float) -> Outcome:
    """Return what late replies leave of counts of the gated counter; the link was told 1.5 s at most."""
    clock, outcome, opened = VirtualClock(0), Outcome(), list[Gate]()
    counter = GatedCounter("counter", lambda start_ns, stop_ns: (_own_number(start_ns),), 0.0, clock)
    counter.watchers.append(opened.append)
    slow = Slow(counter, clock, delay_s=0.03)
    device = ScpiCounter("counter", DeviceEntry(driver="scpi-counter", address=ADDRESS, timeout_s=0.5), clock)
    with serve(clock, ADDRESS, slow, "direct"):
        device.open()
        random = np.random.default_rng(3)
        lines = np.flatnonzero(random.random(100_000) < share)
        slow.faults = {int(one): ("late", float(random.uniform(least_s, most_s))) for one in lines}
        for _ in range(many):
            try:
                device.arm(0.2)
                value = device.read().values[0]
            except DeviceError:
                outcome.loud += 1
                continue
            right = value == _own_number(opened[-1].open_ns)
            outcome.good, outcome.wrong = outcome.good + right, outcome.wrong + (not right)
        outcome.injected = sum(one <= slow.replies for one in slow.faults)
        device.close()
    return outcome


def bare(least_s: float, most_s: float, many: int, share: float) -> Outcome:
    """Return the same of a device whose count is a mere number, and looks like its status."""
    clock = VirtualClock(0)
    device = Device(clock)
    slow = Slow(device, clock, delay_s=0.03)
    with serve(clock, ADDRESS, slow, "direct"), Link(clock, ADDRESS, WIRE, "counter") as link:
        random = np.random.default_rng(3)
        lines = np.flatnonzero(random.random(100_000) < share)
        slow.faults = {int(one): ("late", float(random.uniform(least_s, most_s))) for one in lines}
        outcome = gates(clock, link, device, many, 0.2)
        outcome.injected = sum(one <= slow.replies for one in slow.faults)
    return outcome


def _own_number(start_ns: int) -> int:
    return start_ns // 1_000_000 + 1


def _fault(kind: str, per_hour: float) -> dict[str, Any]:
    late = {"seconds": 0.9} if kind == "late" else {}
    return {"kind": kind, "device": "stages", "per_hour": per_hour} | late


def counts_told(many: int, share: float) -> None:
    """Print what storms leave of counts."""
    blind = replace(WIRE, late_s=0.0)
    print(f"counts, virtual time, TCP              {virtual(Link, WIRE, many, share)}")
    print(f"counts, virtual time, without looking  {virtual(BlindLink, blind, many, share)}")
    for kind in ("tcp", "serial", "rfc2217", "hislip"):
        print(f"counts, real time, {kind:8}            {real(kind, Link, QUICK, many, share)}", flush=True)
        quick = replace(QUICK, late_s=0.0)
        print(
            f"counts, real time, {kind:8} not looking {real(kind, BlindLink, quick, many, share)}", flush=True
        )


def positions_told(many: int, share: float) -> None:
    """Print what storms leave of positions."""
    print(f"positions, virtual time, TCP           {moves(many, share)}", flush=True)
    for kind in ("tcp", "serial", "rfc2217"):
        print(f"positions, real time, {kind:8}         {real_moves(kind, many, share)}", flush=True)


def late_told(many: int, share: float) -> None:
    """Print what replies leave that are later than they can be, and some that are not."""
    for least_s, most_s in ((0.6, 1.4), (1.55, 2.5)):
        span = f"late by {least_s} .. {most_s} s"
        print(f"{span}, gates with numbers    {beyond(least_s, most_s, many, share)}", flush=True)
        print(f"{span}, counts as mere digits {bare(least_s, most_s, many, share)}", flush=True)


STORMS = {"counts": counts_told, "positions": positions_told, "late": late_told}


def main(many: int, share: float, storms: Sequence[str]) -> None:
    """Print a line for every link and client."""
    logging.disable(logging.WARNING)
    for storm in storms:
        STORMS[storm](many, share)


if __name__ == "__main__":
    given = sys.argv[1:] + ["2000", "0.05"][len(sys.argv[1:]) :]
    main(int(given[0]), float(given[1]), given[2:] or tuple(STORMS))
