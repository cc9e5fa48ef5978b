"""Again: the course of a replay. What was done is done again, row by row; no rule decides anything."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace

from daq.errors import DeviceError
from daq.estimate.stopping import PLANNED
from daq.ports import Mask
from daq.records import Quality, Reading
from daq.sequencer import Planned, State, perform
from daq.service.course import react
from daq.service.hearing import hear
from daq.service.holding import wait_out
from daq.service.night import AT_REQUEST, COMPLETE, Night, Trouble, look_after, tell
from daq.service.tape import Tape

Lost = dict[int, list[int]]  # row -> run times of faults before it that are still to come


def carry_out_again(night: Night, tape: Tape) -> str:
    """Perform what a tape holds, from its first row to its last, and return how it ended.

    Raises
    ------
    DeviceError
        When a fault that was laid over it could not be cured within the limits of the table.
    """
    tell(night, "run begins", visit=0, text=f"Replay of {tape.meta['run']}, {len(tape.readings)} rows.")
    night.trouble = Trouble(night.clock.now_ns())
    lost = tape.lost_before()
    while not night.asked.ends and night.archive.rows < len(tape.readings):
        _stretch(night, tape, lost)
        wait_out(night)
    night.become(State.PARKING)
    if night.archive.rows < len(tape.readings):
        return AT_REQUEST
    night.asked.kind = str(tape.meta.get("stop", {}).get("kind", PLANNED))  # it ended as the archived run did
    return COMPLETE


class _StillMask:
    """The mask of a replay: where a visit stood at no opening, nothing moves, and its encoder is believed."""

    def __init__(self, mask: Mask) -> None:
        self._mask = mask
        self.state, self.stop_now = mask.state, mask.stop_now

    def show(self, opening: int) -> float:
        """Start the move to an opening and return how long it will take [s]."""
        return 0.0 if opening < 0 else self._mask.show(opening)

    def target_mm(self, opening: int) -> Mapping[str, float]:
        """Return where every axis of the mask stands when an opening is shown."""
        if opening < 0:
            return {axis: state.encoder_mm for axis, state in self._mask.state().items()}
        return self._mask.target_mm(opening)


def _stretch(night: Night, tape: Tape, lost: Lost) -> None:
    """Perform rows until they are through or a link is lost."""
    performed = perform(
        _supply(night, tape, lost),
        replace(night.devices, mask=_StillMask(night.devices.mask)),
        night.archive,
        night.clock,
        night.become,
        lambda reading: night.judge.judge(_completed(reading, tape.readings[night.archive.rows])),
    )
    try:
        for _, reading in performed:
            _took(night, reading)
    except DeviceError as error:
        react(night, error)


def _supply(night: Night, tape: Tape, lost: Lost) -> Iterator[Planned]:
    """Yield the rows that are still to be done, each for the moment at which its gate opened.

    Where the archived run lost a visit, the same gate is opened at that moment first, and is lost again.
    """
    free_ns = night.clock.now_ns()
    for row in range(night.archive.rows, len(tape.readings)):
        hear(night)
        if night.asked.ends or night.holds:
            return
        visit, attempt, reason = tape.planned(row)
        opened_ns = tape.readings[row].gate_open_ns
        doomed = lost.get(row)
        if doomed:
            opened_ns = min(doomed.pop(0), opened_ns)
        yield replace(visit, pause_s=max(opened_ns - free_ns, 0) / 1e9), attempt, reason
        free_ns = max(opened_ns, free_ns) + round(visit.dwell_s * 1e9)


def _completed(reading: Reading, archived: Reading) -> Reading:
    """Return a replayed reading with what its instruments do not say: sensors, and how it was counted."""
    return replace(
        reading,
        encoder_mm=reading.encoder_mm if archived.encoder_mm else {},
        sensors=archived.sensors,
        slices=archived.slices,
        values_var=archived.values_var,
        repeats=archived.repeats,
        quality=reading.quality | (archived.quality & Quality.OWN_LIVE_TIME),
    )


def _took(night: Night, reading: Reading) -> None:
    if night.judge.finding:
        tell(night, "left out", text=night.judge.finding)
    night.running.add(reading)
    closed = night.live.took(reading, night.judge.odd)
    night.trouble = Trouble(night.clock.now_ns())
    if closed:
        look_after(night, reading.visit)
    night.on_visit(reading)
    night.alive()
    night.live.write(night.state.value, night.running)
