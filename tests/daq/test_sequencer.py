import itertools

import pytest

from daq.errors import DaqError, DeviceError
from daq.records import Quality, Visit
from daq.sequencer import STEPS, State, perform, step
from simulators.clock import VirtualClock
from tests.standins import MemoryBench, fails_once


def plan(*openings_and_places, dwell_s=2.0):
    return [
        (Visit(number, opening, place, dwell_s, stand=0), 1, 0)
        for number, (opening, place) in enumerate(openings_and_places)
    ]


@pytest.fixture
def bench():
    return MemoryBench(VirtualClock(origin_utc_ns=0))


def test_a_gate_closes_then_the_mask_moves_then_the_counter_is_read_then_the_reading_is_durable(bench):
    visits = plan((1, 0.0), (3, 0.0))

    list(perform(visits, bench.devices, bench.sink, bench.clock))

    words = [word for _, word in bench.trace]
    assert words == ["mask to 1", "arm", "mask to 3", "read", "commit", "arm", "read", "commit"]


def test_the_next_move_overlaps_the_readout(bench):
    visits = plan((1, 0.0), (3, 0.0))

    readings = [reading for _, reading in perform(visits, bench.devices, bench.sink, bench.clock)]

    first, second = readings
    assert second.gate_open_ns - first.gate_close_ns == round(bench.mask_move_s * 1e9)


def test_mask_and_detector_move_at_the_same_time(bench):
    visits = plan((1, 0.0), (3, 5.0))

    readings = [reading for _, reading in perform(visits, bench.devices, bench.sink, bench.clock)]

    assert readings[1].gate_open_ns - readings[0].gate_close_ns == round(bench.mask_move_s * 1e9)


def test_a_detector_that_is_there_already_is_not_moved(bench):
    list(perform(plan((1, 0.0), (3, 0.0)), bench.devices, bench.sink, bench.clock))

    assert not [word for _, word in bench.trace if word.startswith("detector to")]


def test_a_reading_says_what_was_counted_and_where(bench):
    ((_, reading),) = perform(plan((5, 3.0)), bench.devices, bench.sink, bench.clock)

    assert (reading.visit, reading.opening, reading.position_mm, reading.values) == (0, 5, 3.0, (1001.0,))
    assert reading.gate_close_ns - reading.gate_open_ns == 2_000_000_000
    assert reading.encoder_mm == {"mask": (5.0, 5.0), "detector": (3.0, 3.0)}
    assert reading.sensors["room_temperature"][:2] == (294.0, "K")
    assert reading.quality == Quality.GOOD


def test_an_axis_off_its_target_is_flagged(bench):
    bench.mask_stage.offset_mm = 0.02

    ((_, reading),) = perform(plan((5, 3.0)), bench.devices, bench.sink, bench.clock)

    assert reading.quality == Quality.OFF_TARGET


def test_an_overflow_is_flagged(bench):
    bench.counter.overflow = True

    ((_, reading),) = perform(plan((5, 3.0)), bench.devices, bench.sink, bench.clock)

    assert reading.quality == Quality.OVERFLOW


def test_a_sensor_is_asked_when_it_is_due_and_no_oftener(bench):
    visits = plan(*[(1, 0.0), (3, 0.0)] * 40)

    readings = [reading for _, reading in perform(visits, bench.devices, bench.sink, bench.clock)]

    asked_s = sorted({reading.sensors["room_temperature"][2] / 1e9 for reading in readings})
    visit_s = 2.0 + bench.mask_move_s
    assert len(asked_s) > 2
    assert all(60 <= later - sooner < 60 + visit_s for sooner, later in itertools.pairwise(asked_s))


def test_a_sensor_that_does_not_answer_leaves_its_quantity_out(bench):
    bench.sensor.every_s = 1.0
    bench.sensor.fault = fails_once("sensor read", "timeout")

    readings = [r for _, r in perform(plan((1, 0.0), (3, 0.0)), bench.devices, bench.sink, bench.clock)]

    assert "room_temperature" in readings[0].sensors
    assert readings[1].sensors == {}


def test_an_axis_that_lost_its_reference_ends_the_visits(bench):
    bench.mask_stage.homed = False

    with pytest.raises(DeviceError, match="lost its reference"):
        list(perform(plan((1, 0.0)), bench.devices, bench.sink, bench.clock))

    assert bench.sink.kept == []


def test_an_axis_that_never_arrives_is_a_timeout(bench):
    bench.mask_stage.move_s = 1e6
    bench.mask_stage.start = lambda position_mm: 0.5  # says half a second, and moves for ever
    bench.mask_stage.due_ns = 10**18

    with pytest.raises(DeviceError, match="still moving") as caught:
        list(perform(plan((1, 0.0)), bench.devices, bench.sink, bench.clock))

    assert caught.value.kind == "timeout"


def test_every_reading_before_a_fault_is_kept(bench):
    bench.counter.fault = fails_once("counter read", "lost")

    with pytest.raises(DeviceError):
        list(perform(plan((1, 0.0), (3, 0.0), (2, 0.0)), bench.devices, bench.sink, bench.clock))

    assert [reading.visit for reading in bench.sink.kept] == [0]


def test_the_states_alternate(bench):
    states: list[State] = []

    list(perform(plan((1, 0.0), (3, 0.0)), bench.devices, bench.sink, bench.clock, states.append))

    assert states == [State.MOVING, State.COUNTING, State.MOVING, State.COUNTING]


@pytest.mark.parametrize("state", list(State))
@pytest.mark.parametrize("to", list(State))
def test_a_step_is_taken_or_refused_by_the_table(state, to):
    if to in STEPS[state]:
        assert step(state, to) is to
    else:
        with pytest.raises(DaqError, match=f"{state.value} cannot become {to.value}"):
            step(state, to)
