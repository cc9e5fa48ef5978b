"""Drivers: what they send, what they never send, and what they do not believe."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import dataclass

import pytest

from daq.devices.counter import ScpiCounter
from daq.devices.sensor import ScpiSensor
from daq.devices.stage import GcodeStage
from daq.errors import DeviceError
from simulators.bench import build
from simulators.clock import VirtualClock
from simulators.hosts import serve
from simulators.settings import read_settings
from tests.daq.devices.scripted import Scripted
from tests.examples import lantern_rig


@dataclass(frozen=True)
class Wired:
    """The Lantern bench with every wire in the test's hand."""

    clock: VirtualClock
    stages: Scripted
    counter: Scripted
    room: Scripted


@pytest.fixture
def wired() -> Iterator[Wired]:
    rig, clock = lantern_rig(), VirtualClock(0)
    known = {name: {"place_mm": 1.0, "homed": True} for name in rig.axes}
    built = build(rig, read_settings(rig), 1, clock, known)
    scripted = {name: Scripted(instrument) for name, instrument in built.instruments.items()}
    hosts = [serve(clock, rig.devices[name].address, instrument) for name, instrument in scripted.items()]
    yield Wired(clock, **scripted)
    for host in hosts:
        host.close()


@pytest.fixture
def stage(wired: Wired) -> GcodeStage:
    mask, _ = GcodeStage.of_rig("stages", lantern_rig(), wired.clock)
    mask.open()
    return mask


@pytest.fixture
def counter(wired: Wired) -> ScpiCounter:
    (counter,) = ScpiCounter.of_rig("counter", lantern_rig(), wired.clock)
    counter.open()
    return counter


@pytest.fixture
def sensor(wired: Wired) -> ScpiSensor:
    (sensor,) = ScpiSensor.of_rig("room", lantern_rig(), wired.clock)
    sensor.open()
    return sensor


@pytest.mark.parametrize("target_mm", [math.nan, math.inf, 20.0001, -0.0001])
def test_nothing_is_sent_for_a_target_that_is_refused(
    wired: Wired, stage: GcodeStage, target_mm: float
) -> None:
    wired.stages.sent.clear()

    with pytest.raises(DeviceError):
        stage.start(target_mm)

    assert wired.stages.sent == []


def test_a_move_is_one_absolute_line_once_its_start_is_known(wired: Wired, stage: GcodeStage) -> None:
    stage.state()
    wired.stages.sent.clear()

    stage.start(4.0)

    assert wired.stages.sent == ["G1 X4.0000 F600.0000"]


def test_two_axes_of_a_controller_share_one_link(wired: Wired) -> None:
    mask, detector = GcodeStage.of_rig("stages", lantern_rig(), wired.clock)

    mask.open()
    detector.open()

    assert wired.stages.sent.count("M100") == 1
    mask.close()
    with pytest.raises(DeviceError):
        detector.state()
    detector.open()
    assert mask.state().homed


def test_a_stop_is_written_past_the_queue_as_one_word(wired: Wired, stage: GcodeStage) -> None:
    wired.stages.sent.clear()

    stage.stop_now()

    assert wired.stages.sent == ["M0"]


def test_an_alarm_is_shown_and_ends_a_search_for_the_reference(wired: Wired, stage: GcodeStage) -> None:
    wired.stages.change = lambda message, reply: reply.replace(b"alarm none", b"alarm stall")

    assert stage.state().alarm == "stall"
    with pytest.raises(DeviceError, match="alarm stall"):
        stage.home()


def test_a_search_for_the_reference_that_does_not_end_is_given_up(wired: Wired, stage: GcodeStage) -> None:
    wired.stages.change = lambda message, reply: reply.replace(b"homed", b"lost")

    with pytest.raises(DeviceError) as gone:
        stage.home()

    assert gone.value.kind == "timeout"


def test_a_controller_without_the_axis_is_refused(wired: Wired) -> None:
    wired.stages.change = lambda message, reply: reply.replace(b"axes XY", b"axes UV")
    mask, _ = GcodeStage.of_rig("stages", lantern_rig(), wired.clock)

    with pytest.raises(DeviceError, match="no axis X"):
        mask.open()


def test_arming_is_never_tried_twice_and_leaves_nothing_to_read(wired: Wired, counter: ScpiCounter) -> None:
    wired.counter.change = lambda message, reply: b"" if "INIT" in message else reply
    wired.counter.sent.clear()

    with pytest.raises(DeviceError) as silent:
        counter.arm(2.2)

    assert silent.value.kind == "timeout"
    assert sum("INIT" in message for message in wired.counter.sent) == 1
    with pytest.raises(DeviceError, match="no gate to read"):
        counter.read()


def test_a_gate_is_armed_by_one_message(wired: Wired, counter: ScpiCounter) -> None:
    wired.counter.sent.clear()

    counter.arm(2.2)
    counter.read()

    assert wired.counter.sent == ["ABOR;CONF:TOT:TIM 2.200000000;:INIT;:SYST:ERR?;:TOT:NUMB?", ":FETC?"]


def test_the_count_of_another_gate_is_not_believed(wired: Wired, counter: ScpiCounter) -> None:
    counter.arm(2.2)
    wired.counter.change = lambda message, reply: b"7,2.200000000,0,1000\n" if "FETC" in message else reply

    with pytest.raises(DeviceError, match="gate 7 and not of gate 1") as wrong:
        counter.read()

    assert wrong.value.kind == "garbage"


@pytest.mark.parametrize(
    "reply", [b"1000\n", b"1,2.2,0,9.91E37\n", b"1,2.200000000,0,-5\n", b"1,2.200000000,0,7,8\n", b"1,2.2"]
)
def test_a_count_in_another_form_is_not_believed(wired: Wired, counter: ScpiCounter, reply: bytes) -> None:
    counter.arm(2.2)
    wired.counter.change = lambda message, right: reply if "FETC" in message else right

    with pytest.raises(DeviceError) as wrong:
        counter.read()

    assert wrong.value.kind in ("garbage", "timeout")


def test_a_readout_that_takes_longer_than_the_rig_says_is_waited_for(
    wired: Wired, counter: ScpiCounter
) -> None:
    busy = iter([b"BUSY\n"] * 3)
    counter.arm(2.2)
    wired.counter.change = lambda message, reply: next(busy, reply) if "FETC" in message else reply
    begun_ns = wired.clock.now_ns()

    counted = counter.read()

    assert counted.live_s == 2.2
    assert wired.clock.now_ns() - begun_ns == 2_330_000_000


def test_a_readout_that_does_not_end_is_given_up(wired: Wired, counter: ScpiCounter) -> None:
    counter.arm(2.2)
    wired.counter.change = lambda message, reply: b"BUSY\n" if "FETC" in message else reply

    with pytest.raises(DeviceError, match="does not end") as endless:
        counter.read()

    assert endless.value.kind == "timeout"


def test_an_overflow_is_passed_on(wired: Wired, counter: ScpiCounter) -> None:
    counter.arm(1.0)
    wired.counter.change = lambda message, reply: (
        b"1,1.000000000,1,4294967295\n" if "FETC" in message else reply
    )

    counted = counter.read()

    assert (counted.values, counted.overflow) == ((4_294_967_295,), True)


def test_what_a_sensor_could_not_measure_is_nan(wired: Wired, sensor: ScpiSensor) -> None:
    wired.room.change = lambda message, reply: b"9.91000000E+37;1.01325E+05\n" if "MEAS" in message else reply

    values = sensor.read()

    assert math.isnan(values["temperature"][0])
    assert values["pressure"] == (101_325.0, "Pa")
