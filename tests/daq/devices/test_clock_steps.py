"""Somebody sets the computer's clock by -4 s or by +1 h: no timeout and no live time notices."""

from __future__ import annotations

import time
from pathlib import Path

import pytest

from daq.devices.clock import RealClock
from daq.devices.links import Link
from daq.devices.registry import open_devices
from daq.devices.wire import Wire
from daq.errors import DeviceError
from daq.records import Reading, Visit
from daq.sequencer import perform
from simulators.bench import open_bench
from tests.daq.devices.real import KINDS, on_port
from tests.daq.devices.test_links import Device
from tests.examples import lantern_rig
from tests.simulators.test_bench import Rows

STEPS_S = (-4.0, 3600.0)
STEADY = [kind for kind in KINDS if kind != "vxi11"]  # its library counts on the wall clock
TIMEOUT_S, SLOW_S = 0.3, 3.0  # a step of 4 s would show, a busy computer need not


@pytest.mark.parametrize("step_s", STEPS_S)
@pytest.mark.parametrize("kind", STEADY)
def test_a_step_changes_no_timeout(
    kind: str, step_s: float, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The wall clock cannot be set in a test, so what reads it is replaced: it jumps at every second look."""
    clock = RealClock()
    device = Device(clock)
    wire = Wire(identity_reply=r"LANTERN,\w+,\d+", timeout_s=2.0, quiet_s=0.01, late_s=0.1)
    with on_port(kind, device, tmp_path) as port, Link(clock, port.address, wire, "counter") as link:
        device.faults = {device.lines + 1: ("silent", 0.0)}
        now, looks = time.time, iter(range(1_000_000))
        monkeypatch.setattr(time, "time", lambda: now() + step_s * (next(looks) % 2))
        began_s = time.monotonic()

        with pytest.raises(DeviceError) as silence:
            link.ask("N?", r"\d+", timeout_s=TIMEOUT_S)
        took_s = time.monotonic() - began_s
        monkeypatch.undo()

        assert silence.value.kind == "timeout"
        assert TIMEOUT_S <= took_s < SLOW_S
        assert link.ask("N?", r"\d+")[0] == "2"


def readings(step_s: float) -> list[Reading]:
    """Return the readings of two stands, UTC stepped after the first."""
    rig = lantern_rig()
    step = {"kind": "clock-step", "at_s": 60.0, "step_s": step_s}
    bench = open_bench(rig, seed=1, transport="direct", state=None, faults={"fault": [step]})
    rows = Rows()
    with open_devices(rig, bench.clock) as devices:
        for stage in devices.stages:
            stage.home()
        visits = [(Visit(number, number % 8, 0.64 * (number // 8), 2.2), 1, 0) for number in range(24)]
        for _ in perform(visits, devices, rows, bench.clock):
            pass
    bench.close()
    return rows.readings


@pytest.mark.parametrize("step_s", STEPS_S)
def test_a_step_changes_no_live_time_no_gate_and_no_count(step_s: float) -> None:
    def told(reading: Reading) -> tuple[object, ...]:
        return (reading.live_s, reading.gate_open_ns, reading.gate_close_ns, reading.values, reading.quality)

    stepped, plain = readings(step_s), readings(0.0)

    assert [told(reading) for reading in stepped] == [told(reading) for reading in plain]
    moved_ns = [one.utc_ns - other.utc_ns for one, other in zip(stepped, plain, strict=True)]
    assert set(moved_ns) == {0, round(step_s * 1e9)}
