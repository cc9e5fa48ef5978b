"""What every device promises, whatever it does."""

from __future__ import annotations

import pytest

from daq.ports import Device, Devices

NAMES = ("mask", "detector", "counter", "room")


@pytest.fixture(params=NAMES)
def device(request: pytest.FixtureRequest, devices: Devices) -> Device:
    return {device.name: device for device in devices.all}[request.param]


class TestDevice:
    """The promises of `daq.ports.Device`."""

    def test_it_has_an_identity(self, device: Device) -> None:
        assert device.identity()

    def test_opened_again_it_is_the_same_device(self, device: Device) -> None:
        before = device.identity()
        device.close()

        device.open()

        assert device.identity() == before

    def test_closing_twice_does_no_harm(self, device: Device) -> None:
        device.close()

        device.close()


def test_every_device_of_the_rig_is_tested(devices: Devices) -> None:
    assert {device.name for device in devices.all} == set(NAMES)
