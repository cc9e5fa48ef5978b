"""Fault scripts: what they refuse, what each kind does, and that a seed fixes everything."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any, Literal

import pytest

from daq.description import Rig
from daq.devices.registry import open_devices
from daq.errors import DescriptionError, DeviceError
from daq.ports import Devices
from simulators.bench import WaveletBench, open_bench
from simulators.counters import CAPACITY
from tests.contracts.rigs import sliced
from tests.examples import CONFIGS, lantern_rig

S = 1_000_000_000
ABC = 7


@contextmanager
def faulty(
    *faults: dict[str, Any],
    seed: int = 1,
    transport: Literal["tcp", "direct"] = "direct",
    rig: Rig | None = None,
) -> Iterator[tuple[WaveletBench, Devices]]:
    """Give a homed bench at 100 s, the mask at ABC, with a fault script."""
    rig = rig or lantern_rig()
    script = {"seed": seed, "fault": list(faults)}
    bench = open_bench(rig, seed=1, transport=transport, state=None, faults=script)
    with open_devices(rig, bench.clock) as devices:
        for stage in devices.stages:
            stage.home()
        devices.mask.show(ABC)
        devices.detector.start(0.0)
        bench.clock.sleep_until(100 * S)
        yield bench, devices
    bench.close()


def struck(bench: WaveletBench) -> list[tuple[int, str, str]]:
    return [(one.at_ns, one.kind, one.outcome) for one in bench.struck()]


def gate(devices: Devices, seconds: float = 1.0) -> float:
    devices.counter.arm(seconds)
    return devices.counter.read().values[0]


@pytest.mark.parametrize(
    ("fault", "problem"),
    [
        ({"kind": "late", "device": "counter", "at_s": 1.0}, "needs 'seconds'"),
        ({"kind": "silent", "device": "counter"}, "is due by one of at_s, at_gate, per_hour"),
        ({"kind": "silent", "device": "counter", "at_s": 1.0, "per_hour": 2.0}, "is due by one of"),
        ({"kind": "silent", "device": "counter", "at_s": 1.0, "seconds": 2.0}, "has no use for 'seconds'"),
        ({"kind": "silent", "device": "countre", "at_s": 1.0}, "no device 'countre'. Name one of stages"),
        ({"kind": "stall", "axis": "mirror", "at_s": 1.0}, "no axis 'mirror'. Name one of mask"),
        ({"kind": "alarm", "device": "counter", "at_s": 1.0}, "moves an axis, not 'counter'"),
        ({"kind": "overflow", "device": "room", "at_s": 1.0}, "needs a counter, not 'room'"),
        ({"kind": "quiet", "device": "counter", "at_s": 1.0}, "fault.0.kind"),
        ({"kind": "silent", "device": "counter", "at_s": -1.0}, "fault.0.at_s"),
        ({"kind": "silent", "device": "counter", "at": 1.0}, "Did you mean 'at_s'"),
    ],
)
def test_a_script_that_cannot_be_meant_is_refused(fault: dict[str, Any], problem: str) -> None:
    with pytest.raises(DescriptionError) as refusal, faulty(fault):
        pass

    assert any(problem in sentence for sentence in refusal.value.problems), refusal.value.problems


def test_the_example_script_fits_the_example_bench() -> None:
    script = tomllib.loads((CONFIGS / "faults" / "rough-night.toml").read_text())

    bench = open_bench(lantern_rig(), seed=1, transport="direct", state=None, faults=script)

    bench.clock.sleep_until(9500 * S)
    assert {kind for _, kind, _ in struck(bench)} >= {"drop", "slip", "beam-off", "clock-step"}
    bench.close()


@pytest.mark.parametrize("kind", ["silent", "half", "garbage", "double", "late", "nak"])
def test_a_spoilt_reply_costs_one_question_and_nothing_else(kind: str) -> None:
    fault = {"kind": kind, "device": "stages", "at_s": 101.0} | ({"seconds": 0.8} if kind == "late" else {})
    with faulty(fault) as (bench, devices):
        before = devices.detector.state()
        bench.clock.sleep_until(101 * S)

        after = devices.detector.state()

        assert after == before
        assert struck(bench) == [(101 * S, kind, "struck")]


def test_a_refused_order_is_not_carried_out() -> None:
    with faulty({"kind": "nak", "device": "stages", "at_s": 101.0}) as (bench, devices):
        bench.clock.sleep_until(101 * S)

        with pytest.raises(DeviceError, match="refused"):
            devices.detector.start(5.0)

        assert devices.detector.state().position_mm == 0.0


def test_a_stop_is_never_spoilt() -> None:
    with faulty({"kind": "nak", "device": "stages", "at_s": 101.0}) as (bench, devices):
        bench.clock.sleep_until(101 * S)
        devices.detector.stop_now()

        assert bench.struck() == []


def test_a_fault_that_nobody_meets_in_time_is_dropped() -> None:
    with faulty({"kind": "silent", "device": "counter", "at_s": 101.0, "expires_s": 5.0}) as (bench, devices):
        bench.clock.sleep_until(107 * S)

        gate(devices)

        assert struck(bench) == [(107 * S, "silent", "expired")]


@pytest.mark.parametrize("transport", ["direct", "tcp"])
def test_a_dropped_link_is_back_after_its_time(transport: Literal["tcp", "direct"]) -> None:
    with faulty(
        {"kind": "drop", "device": "counter", "at_s": 101.0, "seconds": 30.0}, transport=transport
    ) as (
        bench,
        devices,
    ):
        bench.clock.sleep_until(101 * S)

        for again in (devices.counter.busy, devices.counter.open):
            with pytest.raises(DeviceError) as lost:
                again()
            assert lost.value.kind == "lost"
        bench.clock.sleep_until(131 * S)
        devices.counter.open()
        assert gate(devices) > 0


def test_an_alarm_stops_every_axis_and_is_told() -> None:
    with faulty({"kind": "alarm", "device": "stages", "at_s": 101.0}) as (bench, devices):
        devices.detector.start(15.0)
        devices.mask.show(0)
        bench.clock.sleep_until(101 * S)

        states = [devices.detector.state(), *devices.mask.state().values()]

        assert [(state.alarm, state.moving) for state in states] == [("limit", False)] * 2


def test_a_stalled_axis_stands_short_of_its_target() -> None:
    with faulty({"kind": "stall", "axis": "detector", "at_s": 100.1}) as (bench, devices):
        devices.detector.start(10.0)
        bench.clock.sleep_until(101 * S)

        state = devices.detector.state()

        assert (state.position_mm, state.moving) == (10.0, False)
        assert state.encoder_mm == pytest.approx(3.2)  # 0.1 s at 32 mm/s


@pytest.mark.parametrize(("hidden", "encoder_mm"), [(False, 0.5), (True, 0.0)])
def test_a_slip_moves_the_axis_whether_its_encoder_sees_it_or_not(hidden: bool, encoder_mm: float) -> None:
    slip = {"kind": "slip", "axis": "detector", "size_mm": 0.5, "at_s": 101.0, "hidden": hidden}
    with faulty(slip) as (bench, devices):
        before = gate(devices)

        bench.clock.sleep_until(102 * S)
        after = gate(devices)

        assert devices.detector.state().encoder_mm == pytest.approx(encoder_mm)
        assert abs(after - before) > 20 * before**0.5
        devices.detector.home()
        bench.clock.sleep_until(bench.clock.now_ns() + round(devices.detector.start(0.0) * S))
        again = gate(devices)
        assert abs(again - before) < 6 * (2 * before) ** 0.5  # six standard errors: homing mends it


def test_a_gate_overflows_once() -> None:
    with faulty({"kind": "overflow", "device": "counter", "at_gate": 2}) as (_, devices):
        read = []
        for _ in range(3):
            devices.counter.arm(1.0)
            read.append(devices.counter.read())

        assert [counted.overflow for counted in read] == [False, True, False]
        assert read[1].values == (CAPACITY,)


def test_a_saturated_counter_counts_no_more_than_its_rate() -> None:
    saturation = {
        "kind": "saturation",
        "device": "counter",
        "at_s": 101.0,
        "seconds": 10.0,
        "rate_hz": 1000.0,
    }
    with faulty(saturation) as (bench, devices):
        bench.clock.sleep_until(101 * S)
        read = [gate(devices, 2.0)]
        bench.clock.sleep_until(112 * S)
        read.append(gate(devices, 2.0))

        assert read[0] == 2000
        assert read[1] > 2000


def test_light_fails_and_comes_back_weaker() -> None:
    faults = (
        {"kind": "beam-off", "at_s": 101.0, "seconds": 10.0},
        {"kind": "beam-step", "at_s": 111.0, "factor": 0.5},
    )
    with faulty(*faults) as (bench, devices):
        before = gate(devices, 0.5)
        bench.clock.sleep_until(102 * S)
        dark = gate(devices, 0.5)
        bench.clock.sleep_until(112 * S)
        half = gate(devices, 0.5)

        assert dark < 25 + 6 * 5  # 50 dark counts a second, six standard errors
        assert abs(half - before / 2) < 6 * before**0.5


def test_a_clock_step_moves_utc_and_no_run_time() -> None:
    with faulty({"kind": "clock-step", "at_s": 101.0, "step_s": -4.0}) as (bench, _):
        before_ns = bench.clock.utc_ns()

        bench.clock.sleep_until(110 * S)

        assert (bench.clock.now_ns(), bench.clock.utc_ns() - before_ns) == (110 * S, 6 * S)


def rough(seed: int, transport: Literal["tcp", "direct"]) -> tuple[list[object], int]:
    """Return what 200 gates gave and what was struck, with 400 faults an hour on every device."""
    kinds = ("silent", "half", "garbage", "double", "late")
    faults = [
        {"kind": kind, "device": device, "per_hour": 400.0} | ({"seconds": 0.9} if kind == "late" else {})
        for kind in kinds
        for device in ("stages", "counter")
    ]
    seen: list[object] = []
    with faulty(*faults, seed=seed, transport=transport) as (bench, devices):
        for place in range(200):
            try:
                devices.detector.start(0.1 * (place % 7))
                seen.append(gate(devices))
            except DeviceError as error:
                seen.append(error.kind)
        return [*seen, *bench.struck()], len(bench.struck())


def test_a_seed_fixes_every_fault_and_every_count_on_both_transports() -> None:
    first, many = rough(5, "direct")

    assert many > 100
    assert rough(5, "tcp")[0] == first
    assert rough(6, "direct")[0] != first


def test_a_lost_monitor_counts_nothing_until_it_comes_back() -> None:
    fault = {"kind": "monitor-lost", "at_s": 110.0, "seconds": 5.0}
    with faulty(fault, rig=sliced()) as (bench, devices):
        bench.clock.sleep_until(111 * S)
        devices.counter.arm(1.0)
        lost = devices.counter.read()
        bench.clock.sleep_until(116 * S)
        devices.counter.arm(1.0)
        back = devices.counter.read()

    assert lost.values[0] > 0 and lost.values[1] == 0
    assert back.values[1] > 90_000


def test_light_that_goes_away_within_a_gate_shows_in_its_parts() -> None:
    with faulty({"kind": "beam-off", "at_s": 110.0, "seconds": 0.5}, rig=sliced()) as (bench, devices):
        bench.clock.sleep_until(109_750_000_000)
        devices.counter.arm(1.0)
        counted = devices.counter.read()

    parts = [part[0] for part in counted.slices or ()]
    assert max(parts[4:7]) < 100 < min(*parts[:2], *parts[8:])


def test_a_disk_that_fills_up_has_room_again_after_a_while() -> None:
    fault = {"kind": "disk-full", "at_s": 110.0, "seconds": 5.0, "free_bytes": 5e8}
    with faulty(fault) as (bench, _):
        before = bench.free_bytes()
        bench.clock.sleep_until(111 * S)
        full = bench.free_bytes()
        bench.clock.sleep_until(116 * S)

        assert (before, full, bench.free_bytes()) == (float("inf"), 5e8, float("inf"))
