"""Modbus: frames from print, stale answers, refusals, both kinds of line."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import Any

import pytest
from pymodbus.framer import FramerRTU

from daq.description.device import DeviceEntry
from daq.devices.modbus import ModbusSensor
from daq.errors import DeviceError
from simulators.clock import VirtualClock
from simulators.hosts import Send, Session, serve
from simulators.modbus import ModbusRoom, crc16
from simulators.sensors import pressure_pa, temperature_k

S = 1_000_000_000
NUMBERED, CHECKED = "tcp://127.0.0.1:502", "serial:/dev/ttyS1"
REGISTERS: dict[str, Any] = {
    "temperature": {"at": 0, "unit": "K", "factor": 0.01},
    "celsius": {"at": 1, "kind": "i16", "unit": "degC", "factor": 0.01},
    "pressure": {"at": 2, "kind": "f32", "unit": "Pa"},
}


class Spoiler:
    """A room sensor whose n-th answer comes late, or is changed."""

    def __init__(self, room: ModbusRoom, clock: VirtualClock) -> None:
        self.room, self.clock, self.asked = room, clock, 0
        self.late: dict[int, float] = {}
        self.changed: dict[int, bytes] = {}

    def session(self, send: Send) -> Session:
        self.inner, self.send = self.room.session(send), send
        return self

    def feed(self, data: bytes) -> bytes:
        self.asked += 1
        answer = self.inner.feed(data)
        if self.asked in self.late:
            at_ns = self.clock.now_ns() + round(self.late[self.asked] * S)
            self.clock.call_at(at_ns, lambda: self.send(answer))
            return b""
        return self.changed.get(self.asked, answer)


@contextmanager
def opened(address: str, **more: Any) -> Iterator[tuple[VirtualClock, Spoiler, ModbusSensor]]:
    clock = VirtualClock(0)
    room = Spoiler(ModbusRoom(clock, numbered=address == NUMBERED), clock)
    entry = DeviceEntry(
        driver="modbus-sensor", address=address, timeout_s=0.5, **{"registers": REGISTERS, **more}
    )
    with serve(clock, address, room, "direct"):
        sensor = ModbusSensor("room", entry, clock)
        sensor.open()
        yield clock, room, sensor
        sensor.close()


BOTH = pytest.mark.parametrize("address", [NUMBERED, CHECKED])


@pytest.mark.parametrize(
    ("frame", "crc"),
    [(b"123456789", "37 4b"), (b"\x02\x07", "41 12"), (bytes.fromhex("01030000000a"), "c5 cd")],
)
def test_the_crc_is_that_of_the_specification(frame: bytes, crc: str) -> None:
    """MODBUS over Serial Line V1.02, sect. 6.2.2, low byte first; from memory and computed anew."""
    assert crc16(frame).hex(" ") == crc
    assert FramerRTU.compute_CRC(frame).to_bytes(2, "big").hex(" ") == crc


@pytest.mark.parametrize(
    ("address", "question", "answer"),
    [
        (NUMBERED, "00 01 00 00 00 06 01 04 00 08 00 01", "00 01 00 00 00 05 01 04 02 00 0a"),
        (CHECKED, "01 04 00 08 00 01 b0 08", "01 04 02 00 0a 39 37"),
    ],
)
def test_frames_are_those_of_the_specification(address: str, question: str, answer: str) -> None:
    """V1.1b3, sect. 6.4: input register 9 (its place 8) holds 00 0A; from memory, the CRCs computed."""
    asked: list[bytes] = []

    def reply(data: bytes) -> bytes:
        asked.append(data)
        return bytes.fromhex(answer)

    clock, registers = VirtualClock(0), {"nine": {"at": 8, "unit": "1"}}
    entry = DeviceEntry(driver="modbus-sensor", address=address, registers=registers)  # type: ignore[arg-type]
    sensor = ModbusSensor("room", entry, clock)
    with serve(clock, address, Answering(reply)):
        sensor.open()

    assert asked == [bytes.fromhex(question)]


class Answering:
    """An instrument that is one function from bytes to bytes."""

    def __init__(self, feed: Callable[[bytes], bytes]) -> None:
        self.feed = feed

    def session(self, send: Send) -> Session:
        return self


@BOTH
def test_every_kind_of_register_is_read(address: str) -> None:
    with opened(address) as (clock, _, sensor):
        clock.sleep_until(1000 * S)

        values = sensor.read()

        assert values["temperature"][0] == pytest.approx(temperature_k(1000.0), abs=0.005)
        assert values["celsius"][0] == pytest.approx(temperature_k(1000.0) - 273.15, abs=0.005)
        assert values["pressure"][0] == pytest.approx(pressure_pa(1000.0), rel=1e-6)
        assert [unit for _, unit in values.values()] == ["K", "degC", "Pa"]


@BOTH
def test_a_late_answer_is_nobody_elses(address: str) -> None:
    """The temperature comes when the pressure has been asked: 4 bytes and 2, so a mix-up would be seen."""
    with opened(address) as (clock, room, sensor):
        room.late = {room.asked + 1: 0.6, room.asked + 2: 0.6}
        began_ns = clock.now_ns()

        values = sensor.read()

        assert values["pressure"][0] == pytest.approx(pressure_pa(began_ns / S), rel=1e-4)
        assert values["temperature"][0] == pytest.approx(temperature_k(0.0), abs=0.1)


@BOTH
def test_a_broken_answer_is_asked_for_again_and_fails_loudly_in_the_end(address: str) -> None:
    with opened(address) as (_, room, sensor):
        room.changed = {room.asked + 1: b"\x01\x04\x02\x00\x00\x00\x00\x00\x00"}
        once = sensor.read()
        room.changed = {room.asked + number: b"\xff" * 9 for number in range(1, 20)}

        with pytest.raises(DeviceError) as failure:
            sensor.read()

        assert once["temperature"][0] == pytest.approx(293.65, abs=1.0)
        assert failure.value.kind in ("garbage", "timeout")


@BOTH
def test_a_register_that_is_not_there_is_refused(address: str) -> None:
    registers = {"humidity": {"at": 40, "unit": "%"}}

    with (
        pytest.raises(
            DeviceError, match=r"refused register 40: illegal address.* Compare `registers`"
        ) as refusal,
        opened(address, registers=registers),
    ):
        pass

    assert refusal.value.kind == "refused"


@BOTH
def test_another_unit_says_nothing(address: str) -> None:
    with pytest.raises(DeviceError, match="no whole answer") as silence, opened(address, unit=9):
        pass

    assert silence.value.kind == "timeout"


def test_an_answer_from_a_sensor_that_measured_nothing_is_nan() -> None:
    with opened(NUMBERED, registers={"pressure": REGISTERS["pressure"]}) as (_, room, sensor):
        number = (room.asked + 1).to_bytes(2, "big")
        room.changed = {room.asked + 1: number + b"\x00\x00\x00\x07\x01\x04\x04\x7f\xc0\x00\x00"}

        assert str(sensor.read()["pressure"]) == "(nan, 'Pa')"


def test_a_closed_sensor_says_so() -> None:
    with opened(NUMBERED) as (_, _, sensor):
        sensor.close()

        with pytest.raises(DeviceError, match="not open") as lost:
            sensor.read()

        assert lost.value.kind == "lost"
