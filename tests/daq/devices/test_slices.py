"""Slices: the parts of a gate are believed when they are all there and add up."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import pytest

from daq.description import parse
from daq.description.device import DeviceEntry
from daq.devices.counter import ScpiCounter
from daq.devices.dialect_counter import DialectCounter
from daq.devices.slices import adds_up, in_slices, whole_numbers
from daq.errors import DescriptionError, DeviceError
from daq.ports import Counted
from simulators.clock import VirtualClock
from simulators.counters import GatedCounter
from simulators.hosts import serve
from tests.contracts.rigs import sliced
from tests.daq.devices.scripted import Scripted
from tests.examples import changed, rig_table

ADDRESS = "tcp://127.0.0.1:7802"
ENTRY: dict[str, Any] = {"driver": "scpi-counter", "address": ADDRESS, "channels": 2, "slices": 3}
SPOKEN: dict[str, Any] = {
    "schema": 1,
    "kind": "counter",
    "name": "divided gates",
    "identity": {"send": "*IDN?", "reply": "[^,]+,gated counter,[^,]+,[^,]+"},
    "command": {
        "setup": {"send": "*CLS;:CONF:TOT:SLIC 3;:SYST:ERR?", "reply": '0,"No error"'},
        "arm": {"send": "ABOR;CONF:TOT:TIM {dwell};:INIT;:TOT:NUMB?", "reply": r"(?P<gate>\d+)"},
        "fetch": {
            "send": ":FETC?",
            "reply": r"\d+,(?P<live>\d+\.\d+),(?P<over>[01]),"
            r"(?P<value_1>\d+),(?P<value_2>\d+)(?P<slices>[,\d]+)",
            "overflow_when": {"group": "over", "any_of": ["1"]},
            "safe_to_repeat": True,
        },
    },
}


@contextmanager
def counted(reply: bytes | None = None, spoken: bool = False) -> Iterator[Counted]:
    """Give what a counter of two channels and three slices says of a gate of 3 s."""
    clock = VirtualClock(0)
    wire = Scripted(GatedCounter("c", lambda start, stop: ((stop - start) // 10**9, 7), 0.0, clock))
    with serve(clock, ADDRESS, wire):
        if spoken:
            entry = ENTRY | {"driver": "dialect", "dialect": parse(SPOKEN, "x.toml", "dialect")}
            device: ScpiCounter | DialectCounter = DialectCounter("c", DeviceEntry(**entry), clock)
        else:
            device = ScpiCounter("c", DeviceEntry(**ENTRY), clock)
        device.open()
        device.arm(3.0)
        wire.change = lambda message, right: reply if reply and "FETC" in message else right
        yield device.read()


@pytest.mark.parametrize("spoken", [False, True])
def test_channels_and_parts_come_home(spoken: bool) -> None:
    with counted(spoken=spoken) as found:
        assert (found.values, found.slices) == ((3, 21), ((1, 7), (1, 7), (1, 7)))


@pytest.mark.parametrize("spoken", [False, True])
@pytest.mark.parametrize("numbers", ["3,21,1,7,1,7,1,8", "3,21,1,7,1,7,1", "3,21,1,7,1,7"])
def test_parts_that_do_not_add_up_or_are_missing_are_not_believed(numbers: str, spoken: bool) -> None:
    with (
        pytest.raises(DeviceError) as wrong,
        counted(f"1,3.000000000,0,{numbers}\n".encode(), spoken),
    ):
        pass

    assert wrong.value.kind == "garbage"


@pytest.mark.parametrize("spoken", [False, True])
def test_a_channel_that_overflowed_need_not_add_up(spoken: bool) -> None:
    with counted(b"1,3.000000000,1,9,21,4,7,4,7,4,7\n", spoken) as found:
        assert found.overflow


def test_a_night_with_parts_has_them_in_order_of_time() -> None:
    assert in_slices(whole_numbers(",1,2,3,4"), 2) == ((1, 2), (3, 4))
    assert in_slices((), 2) is None
    assert adds_up((4, 6), ((1, 2), (3, 4))) and not adds_up((4, 7), ((1, 2), (3, 4)))


def test_a_dialect_without_parts_cannot_stand_in_a_rig_that_asks_for_them() -> None:
    less = changed(SPOKEN, command__fetch__reply=r"\d+,(?P<live>\d+\.\d+),(?P<over>[01]),(?P<value>\d+)")
    table = changed(rig_table(), devices__counter=ENTRY | {"driver": "dialect", "dialect": less})

    with pytest.raises(
        DescriptionError, match=r"devices\.counter\.slices: dialect 'divided gates' .* 'slices'"
    ):
        parse(table, "rig.toml", "rig")


def test_the_rig_says_how_gates_are_divided() -> None:
    assert sliced().slices == 10
