"""Address: what no device can stand at is found before anybody is asked."""

from __future__ import annotations

import pytest

from daq.description.address import address_problem
from daq.errors import DescriptionError
from tests.examples import lantern_rig


@pytest.mark.parametrize(
    "text",
    [
        "tcp://127.0.0.1:65535",
        "socket://box.lab:4001",
        "rfc2217://box.lab:4001",
        "serial:/dev/ttyUSB0",
        "serial:COM3?baud=9600&parity=E&bits=7&stop=1.5",
        "visa:TCPIP::10.0.0.5::hislip0::INSTR",
    ],
)
def test_an_address_of_each_kind_is_sound(text: str) -> None:
    assert address_problem(text) == ""


@pytest.mark.parametrize(
    ("text", "why"),
    [
        ("tcp://127.0.0.1:65536", "no port has a number above 65535"),
        ("tcp://127.0.0.1", "an address is tcp://host:port"),
        ("tcp://127.0.0.1:80/x", "an address is"),
        ("udp://127.0.0.1:80", "an address is"),
        ("serial:", "an address is"),
        ("visa:", "an address is"),
        ("serial:/dev/ttyS0?bauds=9600", "no setting 'bauds'; it has baud, bits, parity, stop"),
        ("serial:/dev/ttyS0?baud=fast", "'fast' is no value for baud"),
        ("serial:/dev/ttyS0?parity=X", "'X' is no value for parity"),
    ],
)
def test_an_address_where_nothing_can_be_says_why(text: str, why: str) -> None:
    assert why in address_problem(text)


def test_a_rig_says_which_address_and_which_two_devices() -> None:
    with pytest.raises(DescriptionError, match=r"devices\.room\.address: no port has a number above 65535"):
        lantern_rig(devices__room__address="tcp://127.0.0.1:70000")
    with pytest.raises(DescriptionError, match=r"devices\.room\.address: device 'counter' stands at tcp"):
        lantern_rig(devices__room__address="tcp://127.0.0.1:7802")
