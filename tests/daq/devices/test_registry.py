"""Registry: drivers by name, and the devices of a rig opened and closed together."""

from __future__ import annotations

import pytest

from daq.devices.registry import device_problems, known_drivers, open_devices
from daq.errors import DescriptionError, DeviceError
from daq.ports import Devices
from simulators.bench import open_bench
from simulators.clock import VirtualClock
from tests.examples import lantern_rig


def test_an_unknown_driver_is_named_with_its_place_and_the_known_ones() -> None:
    rig = lantern_rig(devices__counter__driver="scpi-countre", devices__room__driver="")

    with pytest.raises(DescriptionError) as problem, open_devices(rig, VirtualClock(0)):
        pass

    known = f"Name one of {', '.join(known_drivers())}."
    assert problem.value.problems == (
        f"rig lantern-bench, devices.counter.driver: there is no driver 'scpi-countre'. {known}",
        f"rig lantern-bench, devices.room.driver: there is no driver ''. {known}",
    )


def test_drivers_are_found_by_their_entry_points() -> None:
    assert set(known_drivers()) >= {"gcode-stage", "scpi-counter", "scpi-sensor"}


def test_the_lantern_rig_has_no_problem() -> None:
    assert device_problems(lantern_rig()) == ()


def test_a_rig_has_exactly_one_counter() -> None:
    two = {"driver": "scpi-counter", "address": "tcp://127.0.0.1:7899"}

    assert "one counter, not counter, spare" in device_problems(lantern_rig(devices__spare=two))[0]
    assert "one counter, not none" in device_problems(lantern_rig(devices__counter__driver="scpi-sensor"))[0]


def test_an_axis_on_something_that_moves_nothing_is_refused() -> None:
    problems = device_problems(lantern_rig(axes__detector__device="room"))

    assert problems == (
        "rig lantern-bench, axes.detector.device: 'room' moves nothing. Name a stage controller.",
    )


def test_devices_are_closed_when_the_block_ends() -> None:
    bench = open_bench(lantern_rig(), seed=1, transport="direct", state=None)

    with open_devices(lantern_rig(), bench.clock) as devices:
        assert _answers(devices) == 4

    assert _answers(devices) == 0


def test_a_device_that_does_not_answer_is_named() -> None:
    clock = VirtualClock(0)

    with (
        pytest.raises(DeviceError, match=r"stages on tcp://127.0.0.1:7801") as silent,
        open_devices(lantern_rig(), clock),
    ):
        pass

    assert silent.value.kind == "lost"


def _answers(devices: Devices) -> int:
    """Return how many of the four devices answer."""
    asked = [stage.state for stage in devices.stages]
    asked += [devices.counter.busy, *(sensor.read for sensor in devices.sensors)]  # type: ignore[list-item]
    answers = 0
    for ask in asked:
        try:
            ask()
            answers += 1
        except DeviceError as error:
            assert error.kind == "lost"
    return answers
