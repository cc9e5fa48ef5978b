"""What every device promises, whatever it does."""

from __future__ import annotations

from daq.description import Rig
from daq.ports import Devices


class TestDevice:
    """The promises of `daq.ports.Device`."""

    def test_it_has_an_identity(self, devices: Devices) -> None:
        assert all(device.identity() for device in devices.all)

    def test_opened_again_it_is_the_same_device(self, devices: Devices) -> None:
        before = [device.identity() for device in devices.all]
        for device in devices.all:
            device.close()

        for device in devices.all:
            device.open()

        assert [device.identity() for device in devices.all] == before

    def test_closing_twice_does_no_harm(self, devices: Devices) -> None:
        for device in devices.all:
            device.close()

            device.close()


def test_every_device_of_the_rig_is_tested(devices: Devices, rig: Rig) -> None:
    moved = {axis.device for axis in rig.axes.values()}

    assert {device.name for device in devices.all} == set(rig.axes) | (set(rig.devices) - moved)
