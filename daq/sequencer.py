"""Sequencer: visits and devices become readings. A generator that keeps nothing and decides nothing.

The order of work is: the gate closes, the next move starts, the counter is read, the reading is committed,
what is left of the move is waited for, the next gate opens.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import dataclass
from enum import Enum

from daq.errors import DaqError, DeviceError
from daq.estimate.quality import encoder_bits
from daq.ports import AxisState, Clock, Counted, Devices, Sink
from daq.records import DARK_VISIT, FLANK_VISIT, Quality, Reading, Visit

POLL_NS = 10_000_000
PAUSE_STEP_NS = 1_000_000_000
MOVE_GRACE_S = 10.0
GATE_GRACE_S = 5.0
UNPLANNED_BITS = {DARK_VISIT: Quality.DARK, FLANK_VISIT: Quality.FLANK}  # by reason


class State(Enum):
    """State of a run."""

    READY = "ready"
    MOVING = "moving"
    COUNTING = "counting"
    HOLDING = "holding"
    PARKING = "parking"
    ENDED = "ended"


STEPS: Mapping[State, frozenset[State]] = {
    State.READY: frozenset({State.MOVING, State.HOLDING, State.PARKING, State.ENDED}),
    State.MOVING: frozenset({State.COUNTING, State.HOLDING, State.PARKING}),
    State.COUNTING: frozenset({State.MOVING, State.HOLDING, State.PARKING}),
    State.HOLDING: frozenset({State.MOVING, State.PARKING}),
    State.PARKING: frozenset({State.ENDED}),
    State.ENDED: frozenset(),
}


def step(state: State, to: State) -> State:
    """Return the next state of a run.

    Raises
    ------
    DaqError
        For a step that the table does not hold; nothing changes then.
    """
    if to not in STEPS[state]:
        raise DaqError(f"a run that is {state.value} cannot become {to.value}", remedy="See `tercet status`")
    return to


Planned = tuple[Visit, int, int]  # visit, attempt, reason
Sensed = dict[str, dict[str, tuple[float, str, int]]]  # sensor -> quantity -> value, unit, when


@dataclass(frozen=True, slots=True)
class _Arrival:
    """A move under way: when it should be over, until when it may last, when the pause after it ends."""

    due_ns: int
    limit_ns: int
    rested_ns: int


@dataclass(frozen=True, slots=True)
class _Gate:
    """An open gate: what it counts, since when, and where the axes stood when it opened."""

    planned: Planned
    open_ns: int
    utc_ns: int
    axes: Mapping[str, AxisState]


def perform(
    visits: Iterable[Planned],
    devices: Devices,
    sink: Sink,
    clock: Clock,
    becomes: Callable[[State], None] = lambda state: None,
    judge: Callable[[Reading], Reading] = lambda reading: reading,
    patient: Callable[[], bool] = lambda: True,
) -> Iterator[tuple[int, Reading]]:
    """Yield (row, reading) for each visit, once the reading is durable.

    Parameters
    ----------
    visits
        (visit, attempt, reason) in order; the next one is asked for while the gate is open, so that whoever
        supplies them may end the run there.
    becomes
        Told of every state that the run enters.
    judge
        Adds to a reading's quality what the rules of the night say, before it is made durable.
    patient
        Asked every second of a pause; the pause is cut short when somebody waits for the run.

    Raises
    ------
    DeviceError
        When a device does not do what it was asked; the visit under way is lost, all committed ones are safe.
    StorageError
        When a reading could not be made durable.
    """
    upcoming = iter(visits)
    planned = next(upcoming, None)
    if planned is None:
        return
    becomes(State.MOVING)
    arrival = _start_moves(planned[0], devices, clock)
    sensed: Sensed = {}
    while planned is not None:
        _rest(arrival, clock, patient)
        gate = _open_gate(planned, arrival, devices, clock)
        becomes(State.COUNTING)
        _sense(devices, clock, sensed)
        following = next(upcoming, None)
        _await_gate(gate, devices, clock)
        closed = _axes(devices)
        if following is not None:
            becomes(State.MOVING)
            arrival = _start_moves(following[0], devices, clock)
        reading = judge(_reading(gate, closed, devices.counter.read(), sensed, devices))
        yield sink.commit(reading), reading
        planned = following


def _open_gate(planned: Planned, arrival: _Arrival, devices: Devices, clock: Clock) -> _Gate:
    axes = _await_arrival(planned[0], arrival, devices, clock)
    gate = _Gate(planned, clock.now_ns(), clock.utc_ns(), axes)
    devices.counter.arm(planned[0].dwell_s)
    return gate


def _start_moves(visit: Visit, devices: Devices, clock: Clock) -> _Arrival:
    """Start the moves to a visit; the detector stays where it is when it is there already."""
    now_ns = clock.now_ns()
    predicted_s = devices.mask.show(visit.opening)
    if not math.isclose(devices.detector.state().position_mm, visit.position_mm, abs_tol=1e-6):
        predicted_s = max(predicted_s, devices.detector.start(visit.position_mm))
    due_ns = now_ns + round(predicted_s * 1e9)
    rested_ns = now_ns + round((predicted_s + visit.pause_s) * 1e9)
    return _Arrival(due_ns, rested_ns + round((predicted_s + MOVE_GRACE_S) * 1e9), rested_ns)


def _rest(arrival: _Arrival, clock: Clock, patient: Callable[[], bool]) -> None:
    """Wait until a move should be over, and then through the pause of its visit."""
    clock.sleep_until(arrival.due_ns)
    while clock.now_ns() < arrival.rested_ns and patient():
        clock.sleep_until(min(clock.now_ns() + PAUSE_STEP_NS, arrival.rested_ns))


def _await_arrival(
    visit: Visit, arrival: _Arrival, devices: Devices, clock: Clock
) -> Mapping[str, AxisState]:
    axes = _axes(devices)
    while any(axis.moving for axis in axes.values()):
        if clock.now_ns() > arrival.limit_ns:
            slow = next(name for name, axis in axes.items() if axis.moving)
            raise DeviceError(
                f"still moving {MOVE_GRACE_S:g} s after it should have arrived for visit {visit.number}",
                where=f"axis {slow}",
                remedy="Look at the stage, then go on with `tercet run --resume RUN`",
                kind="timeout",
            )
        clock.sleep_until(clock.now_ns() + POLL_NS)
        axes = _axes(devices)
    for name, axis in axes.items():
        trouble = axis_trouble(name, axis)
        if trouble is not None:
            raise trouble
    return axes


def axis_trouble(name: str, state: AxisState) -> DeviceError | None:
    """Return what is wrong with an axis by its own account, if anything."""
    remedy = "Look at the stage, and home it at the bench"
    if state.alarm:
        return DeviceError(f"alarm: {state.alarm}", where=f"axis {name}", remedy=remedy, kind="alarm")
    if not state.homed:
        return DeviceError("lost its reference", where=f"axis {name}", remedy=remedy, kind="reference")
    return None


def _await_gate(gate: _Gate, devices: Devices, clock: Clock) -> None:
    close_ns = gate.open_ns + round(gate.planned[0].dwell_s * 1e9)
    clock.sleep_until(close_ns)
    while devices.counter.busy():
        if clock.now_ns() > close_ns + GATE_GRACE_S * 1e9:
            raise DeviceError(
                f"the gate is still open {GATE_GRACE_S:g} s after its end",
                where=f"counter {devices.counter.name}",
                remedy="Look at the counter, then go on with `tercet run --resume RUN`",
                kind="timeout",
            )
        clock.sleep_until(clock.now_ns() + POLL_NS)


def _reading(
    gate: _Gate,
    closed: Mapping[str, AxisState],
    counted: Counted,
    sensed: Sensed,
    devices: Devices,
) -> Reading:
    visit, attempt, reason = gate.planned
    return Reading(
        visit=visit.number,
        attempt=attempt,
        opening=visit.opening,
        position_mm=visit.position_mm,
        dwell_s=visit.dwell_s,
        gate_open_ns=gate.open_ns,
        gate_close_ns=gate.open_ns + round(counted.live_s * 1e9),
        utc_ns=gate.utc_ns,
        live_s=counted.live_s,
        values=counted.values,
        values_var=counted.values_var,
        repeats=counted.repeats,
        slices=counted.slices,
        events=counted.events,
        encoder_mm={axis: (gate.axes[axis].encoder_mm, closed[axis].encoder_mm) for axis in gate.axes},
        sensors={key: value for values in sensed.values() for key, value in values.items()},
        quality=_counter_quality(counted)
        | _axis_quality(gate, closed, devices)
        | UNPLANNED_BITS.get(reason, Quality.GOOD),
        reason=reason,
    )


def _axes(devices: Devices) -> dict[str, AxisState]:
    return {**devices.mask.state(), devices.detector.name: devices.detector.state()}


def _sense(devices: Devices, clock: Clock, sensed: Sensed) -> None:
    """Ask each sensor that is due; one that does not answer leaves its quantities out."""
    now_ns = clock.now_ns()
    for sensor in devices.sensors:
        last_ns = min((at_ns for _, _, at_ns in sensed.get(sensor.name, {}).values()), default=None)
        if last_ns is not None and now_ns - last_ns < sensor.every_s * 1e9:
            continue
        try:
            values = sensor.read()
        except DeviceError:
            values = {}
        sensed[sensor.name] = {f"{sensor.name}_{key}": (*pair, now_ns) for key, pair in values.items()}


def _counter_quality(counted: Counted) -> Quality:
    quality = Quality.OVERFLOW if counted.overflow else Quality.GOOD
    return quality | (Quality.OWN_LIVE_TIME if counted.own_live_time else Quality.GOOD)


def _axis_quality(gate: _Gate, closed: Mapping[str, AxisState], devices: Devices) -> Quality:
    visit = gate.planned[0]
    target_mm = {**devices.mask.target_mm(visit.opening), devices.detector.name: visit.position_mm}
    ends_mm = {axis: (state.encoder_mm, closed[axis].encoder_mm) for axis, state in gate.axes.items()}
    return encoder_bits(target_mm, ends_mm, devices.tolerance_mm)
