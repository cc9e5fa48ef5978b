"""Moves: the visits of a task over the same ports and the same sequencer as those of a run."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping
from dataclasses import replace

from daq.errors import DaqError, DeviceError
from daq.estimate.quality import Rules, counter_bits
from daq.ports import AxisState, Clock, Devices, Mask, Sink, Stage
from daq.records import UNPLANNED, Quality, Reading, Visit
from daq.sequencer import perform
from daq.tasks.contract import Ask, Knob, Taken, Turn

GRACE_S, POLL_NS = 10.0, 20_000_000
IN_THE_BEAM: frozenset[Knob] = frozenset(
    {"attenuator"}
)  # the shutter is asked to block while hands are there


class FreeMask:
    """A mask that also goes to places between its openings; `ask` says which visit it is for."""

    def __init__(self, mask: Mask, stage: Stage, settle_s: float) -> None:
        self._mask, self._stage, self._settle_s = mask, stage, settle_s
        self.ask: Ask | None = None

    def show(self, opening: int) -> float:
        """Start the move of the present visit and return how long it will take [s]."""
        ask = self.ask
        free = ask is not None and ask.place_mm is not None
        predicted_s = self._stage.start(ask.place_mm) if ask and free else self._mask.show(opening)  # type: ignore[arg-type]
        return max(predicted_s - self._settle_s, 0.0) if ask and ask.early else predicted_s

    def state(self) -> Mapping[str, AxisState]:
        """Return the state of the mask's axis by its name."""
        return self._mask.state()

    def target_mm(self, opening: int) -> Mapping[str, float]:
        """Return where the mask's axis stands in the present visit."""
        if self.ask is not None and self.ask.place_mm is not None:
            return {self._stage.name: self.ask.place_mm}
        return self._mask.target_mm(opening)

    def stop_now(self) -> None:
        """Stop the mask's axis, from any thread."""
        self._mask.stop_now()


def taken(
    asks: Iterable[Ask],
    devices: Devices,
    mask: FreeMask,
    sink: Sink,
    clock: Clock,
    first: int | None,
    turned: Callable[[Turn], Turn],
    rules: Rules,
) -> Iterator[Taken]:
    """Yield every visit that is asked for with its reading, once that is durable.

    Parameters
    ----------
    first
        Planned number of the first visit; None for visits that nobody had planned.
    turned
        Has what only a person may do done, waits for it, and returns it with what was shown then.
    rules
        Of the night: how much the counter can count, and how bright the detector may see it.

    Raises
    ------
    DaqError
        When there is more than that: nothing is moved any further.
    DeviceError
        When a device does not do what it was asked.
    """
    hands = replace(devices, mask=mask)
    for place, asked in enumerate(asks):
        ask = _by_hand(asked, devices, clock, turned)
        _beam(ask.beam, devices, clock)
        mask.ask = ask
        if ask.via_mm is not None:
            _go(mask_stage(devices, mask), ask.via_mm, clock)
        number = UNPLANNED if first is None else first + place
        visit = Visit(number, ask.opening, ask.position_mm, ask.dwell_s)
        for _, reading in perform([(visit, 1, ask.reason)], hands, sink, clock):
            _refuse_saturated(reading, rules)
            # events are in the archive; a watch of twenty minutes is not kept in memory count by count
            yield ask, reading if ask.events else replace(reading, events=None)


def _by_hand(ask: Ask, devices: Devices, clock: Clock, turned: Callable[[Turn], Turn]) -> Ask:
    """Return a visit once a person has done what it needs; the beam is shut while hands reach into it."""
    if ask.turn is None:
        return ask
    if ask.turn.knob in IN_THE_BEAM:
        _beam("shut", devices, clock)
    return replace(ask, turn=turned(ask.turn))


def mask_stage(devices: Devices, mask: Mask) -> Stage:
    """Return the stage that carries the mask."""
    names = set(mask.state())
    return next(stage for stage in devices.stages if stage.name in names)


def _refuse_saturated(reading: Reading, rules: Rules) -> None:
    why = _too_much(reading, rules)
    if why:
        raise DaqError(
            f"{why} with the detector at {reading.position_mm:g} mm: it is saturated",
            where="counter",
            remedy="Take light away, then repeat the task; nothing was moved further",
        )


def _too_much(reading: Reading, rules: Rules) -> str:
    """Return what is too much for counter or detector, in words; nothing where all is well."""
    if (reading.quality | counter_bits(reading, rules, None)) & Quality.OVERFLOW:
        return "the counter overflowed"
    rate_hz = reading.values[0] / reading.live_s if reading.live_s > 0 else 0.0
    if rules.overload_hz is not None and rate_hz > rules.overload_hz:
        return f"{rate_hz:.0f} counts a second, {rules.overload_hz:.0f} are allowed,"
    return ""


def _beam(beam: str, devices: Devices, clock: Clock) -> None:
    """Let the shutter stand as it is asked to, "open" or "shut"; it waits until it does."""
    shutter = devices.shutter
    if shutter is None or not beam:
        return
    wanted = "open" if beam == "open" else "blocked"
    if shutter.state() == wanted:
        return
    shutter.armed = True  # a task is done with somebody at the bench
    (shutter.unblock if beam == "open" else shutter.block)()
    until_ns = clock.now_ns() + round(GRACE_S * 1e9)
    while shutter.state() != wanted:
        if clock.now_ns() > until_ns:
            raise DeviceError(f"it is not {wanted}", where="shutter", remedy="Look at it", kind="timeout")
        clock.sleep_until(clock.now_ns() + POLL_NS)


def _go(stage: Stage, place_mm: float, clock: Clock) -> None:
    predicted_s = stage.start(place_mm)
    until_ns = clock.now_ns() + round((2 * predicted_s + GRACE_S) * 1e9)
    clock.sleep_until(clock.now_ns() + round(predicted_s * 1e9))
    while stage.state().moving:
        if clock.now_ns() > until_ns:
            raise DeviceError(
                "it does not arrive", where=f"axis {stage.name}", remedy="Look at it", kind="timeout"
            )
        clock.sleep_until(clock.now_ns() + POLL_NS)
