"""What every sensor promises."""

from __future__ import annotations

import math

import pytest

from daq.ports import Devices, Sensor
from simulators.bench import WaveletBench
from tests.examples import lantern_rig


@pytest.fixture(
    params=[name for name, entry in lantern_rig().devices.items() if entry.driver.endswith("-sensor")]
)
def sensor(request: pytest.FixtureRequest, devices: Devices) -> Sensor:
    return {sensor.name: sensor for sensor in devices.sensors}[request.param]


class TestSensor:
    """The promises of `daq.ports.Sensor`."""

    def test_it_gives_finite_values_in_si_units(self, sensor: Sensor) -> None:
        values = sensor.read()

        assert {name: unit for name, (_, unit) in values.items()} == {"temperature": "K", "pressure": "Pa"}
        assert all(math.isfinite(value) for value, _ in values.values())

    def test_it_is_asked_as_often_as_the_rig_says(self, sensor: Sensor) -> None:
        assert sensor.every_s == lantern_rig().devices[sensor.name].every_s

    def test_its_values_follow_the_time(self, sensor: Sensor, bench: WaveletBench) -> None:
        before = sensor.read()
        bench.clock.sleep_until(3_600_000_000_000)

        after = sensor.read()

        assert all(after[name] != before[name] for name in before)
