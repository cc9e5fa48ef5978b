"""What every sensor promises."""

from __future__ import annotations

import math

from daq.description import Rig
from daq.ports import Devices
from simulators.bench import WaveletBench

UNITS = {"temperature": "K", "pressure": "Pa"}


class TestSensor:
    """The promises of `daq.ports.Sensor`."""

    def test_it_gives_finite_values_in_si_units(self, devices: Devices) -> None:
        for sensor in devices.sensors:
            values = sensor.read()

            assert values
            assert all(UNITS[name] == unit and math.isfinite(value) for name, (value, unit) in values.items())

    def test_it_is_asked_as_often_as_the_rig_says(self, devices: Devices, rig: Rig) -> None:
        assert devices.sensors
        assert all(sensor.every_s == rig.devices[sensor.name].every_s for sensor in devices.sensors)

    def test_its_values_follow_the_time(self, devices: Devices, bench: WaveletBench) -> None:
        before = [sensor.read() for sensor in devices.sensors]
        bench.clock.sleep_until(3_600_000_000_000)

        after = [sensor.read() for sensor in devices.sensors]

        assert all(new[name] != old[name] for old, new in zip(before, after, strict=True) for name in old)
