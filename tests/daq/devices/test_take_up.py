"""Take-up: an axis with play always comes from the same side, and both directions take equal time."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import pytest

from daq.devices.registry import open_devices
from daq.errors import DeviceError
from daq.ports import Stage
from simulators.bench import WaveletBench, open_bench
from tests.examples import lantern_rig

S = 1_000_000_000
POLL_NS = 10_000_000  # as the sequencer looks


@contextmanager
def axis(**changes: Any) -> Iterator[tuple[WaveletBench, Stage]]:
    """Give the homed detector axis, 32 mm/s, that takes up play for 0.1 s: 1.6 mm past its target."""
    given = {"approach": "up", "takeup_s": 0.1} | changes
    rig = lantern_rig(**{f"axes__detector__{key}": value for key, value in given.items()})
    bench = open_bench(rig, seed=1, transport="direct", state=None)
    with open_devices(rig, bench.clock) as devices:
        devices.detector.home()
        yield bench, devices.detector
    bench.close()


def arrived_s(bench: WaveletBench, stage: Stage, target_mm: float) -> tuple[float, list[float]]:
    """Return how long a move took, and where the axis truly was on its way."""
    clock, places = bench.clock, []
    began_ns = clock.now_ns()
    clock.sleep_until(began_ns + round(stage.start(target_mm) * S))
    places.append(bench.truth_mm("detector"))
    while stage.state().moving:
        clock.sleep_until(clock.now_ns() + POLL_NS)
        places.append(bench.truth_mm("detector"))
    return (clock.now_ns() - began_ns) / S, places


@pytest.mark.parametrize("approach", ["up", "down"])
def test_both_directions_take_equal_time_and_end_at_the_target(approach: str) -> None:
    with axis(approach=approach) as (bench, stage):
        arrived_s(bench, stage, 0.0)
        times_s = []
        for target_mm in (6.4, 0.0, 6.4, 0.0):
            took_s, _ = arrived_s(bench, stage, target_mm)
            times_s.append(took_s)

            assert bench.truth_mm("detector") == pytest.approx(target_mm)
            assert stage.state().encoder_mm == pytest.approx(target_mm)

        planned_s = lantern_rig().axes["detector"].settle_s + 6.4 / 32 + 0.1
        assert all(planned_s <= took_s <= planned_s + 0.011 for took_s in times_s)  # one look more


@pytest.mark.parametrize(("approach", "sign"), [("up", -1.0), ("down", 1.0)])
def test_the_last_stretch_always_comes_from_the_same_side(approach: str, sign: float) -> None:
    with axis(approach=approach) as (bench, stage):
        arrived_s(bench, stage, 0.0)
        for target_mm in (6.4, 0.0):
            _, places = arrived_s(bench, stage, target_mm)

            assert all(sign * (place - target_mm) >= -1e-9 for place in places)


def test_a_move_that_would_go_past_the_limits_is_refused() -> None:
    with axis() as (bench, stage):
        arrived_s(bench, stage, 0.0)

        with pytest.raises(DeviceError, match=r"goes past it to -16.1 mm, outside the limits; not sent"):
            stage.start(-14.5)

        assert stage.state().position_mm == 0.0


def test_a_stop_on_the_way_is_not_followed_by_the_way_back() -> None:
    with axis() as (bench, stage):
        arrived_s(bench, stage, 10.0)
        stage.start(0.0)
        bench.clock.sleep_until(bench.clock.now_ns() + S // 10)
        stage.stop_now()
        here_mm = stage.state().encoder_mm

        bench.clock.sleep_until(bench.clock.now_ns() + 10 * S)

        assert not stage.state().moving
        assert stage.state().encoder_mm == here_mm


def test_an_axis_without_play_moves_as_before() -> None:
    with axis(takeup_s=0.0, approach="either") as (bench, stage):
        assert arrived_s(bench, stage, 0.0)[0] == pytest.approx(0.3 + 15.0 / 32)
