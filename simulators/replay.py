"""Replay: instruments that give what an archive holds, reading by reading, over the same protocols.

The bench is told which row is due (the number of readings that are stored already), so that a gate that was
lost is simply opened again. Encoders, counts, live times and the jumps of UTC come from the archive.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import partial
from itertools import pairwise
from typing import Any, Literal

from daq.description import Rig
from daq.errors import DescriptionError
from daq.ports import Clock
from daq.records import Quality, Reading
from simulators.clock import VirtualClock
from simulators.counters import Gate, GatedCounter
from simulators.faults import read_script
from simulators.hosts import Host, Instrument, Send, serve
from simulators.lines import LineSession
from simulators.motion import NS, Track
from simulators.pace import PacedClock
from simulators.powermeter import PowerMeter
from simulators.stages import StageController, Travel
from simulators.upsets import Spoilt, Upsets

COUNTER, STAGES = "counter", "stages"


@dataclass(frozen=True, slots=True)
class Tape:
    """What an archive holds, and which row of it is due now; `lost_before` row -> links lost before it."""

    readings: Sequence[Reading]
    due: Callable[[], int]
    lost_before: Mapping[int, int]

    def now(self) -> Reading | None:
        """Return the reading that is due; None before the first and after the last."""
        row = self.due()
        return self.readings[row] if row < len(self.readings) else None


class TapedTrack(Track):
    """An axis whose encoder shows what the archive says of it at the edges of each gate."""

    def __init__(self, name: str, tape: Tape, place_mm: float) -> None:
        super().__init__(place_mm, place_mm, homed=True)
        self._name, self._tape = name, tape

    def shown_mm(self, at_ns: int) -> float:
        """Return what the encoder showed when the gate opened, or when it closed [mm]."""
        reading = self._tape.now()
        ends = None if reading is None else reading.encoder_mm.get(self._name)
        if reading is None or ends is None or ends != ends or self.moving(at_ns):
            return super().shown_mm(at_ns)
        shown = ends[at_ns >= reading.gate_open_ns + round(reading.dwell_s * NS)]
        return shown if shown == shown else super().shown_mm(at_ns)


class Losses:
    """The links that the archived run lost: where one is due, the instrument falls silent.

    Parameters
    ----------
    tape
        What the archive holds.
    lose
        Ends the instrument's connection.
    """

    def __init__(self, tape: Tape, lose: Callable[[], None]) -> None:
        self._due, self._left, self._lose = tape.due, dict(tape.lost_before), lose
        self._dumb = False

    def session(self, answer: Callable[[str], str | None]) -> LineSession:
        """Return a session; it says nothing more once its link is to be lost."""
        self._dumb = False
        return LineSession(lambda line: self._unless_dumb(answer(line)))

    def strike(self) -> bool:
        """Return whether a gate that is to be opened is lost, with its link."""
        row = self._due()
        if not self._left.get(row):
            return False
        self._left[row] -= 1
        self._dumb = True
        self._lose()
        return True

    def _unless_dumb(self, reply: str | None) -> str | None:
        return None if self._dumb else reply


class TapedCounter(GatedCounter):
    """A counter that gives what the archive holds; its link is lost where the archived run lost a visit."""

    def __init__(self, tape: Tape, clock: Clock, losses: Losses) -> None:
        super().__init__(COUNTER, lambda open_ns, close_ns: (0,), 0.0, clock)
        self._tape, self._losses = tape, losses

    def session(self, send: Send) -> LineSession:
        """Return a session; it says nothing more once its link is to be lost."""
        return self._losses.session(self._interpreter.answer)

    def _initiate(self) -> None:
        if not self._losses.strike():
            super()._initiate()

    def _answer_of(self, gate: Gate) -> str:
        reading = self._tape.now()
        if reading is None:
            return super()._answer_of(gate)
        parts = reading.slices or ()
        counts = [*map(int, reading.values), *(count for part in parts for count in part)]
        overflow = int(bool(reading.quality & Quality.OVERFLOW))
        return f"{gate.number},{reading.live_s:.9f},{overflow},{','.join(map(str, counts))}"


class TapedPowerMeter(PowerMeter):
    """A power meter that gives what the archive holds, and loses its link as the counter does."""

    def __init__(self, tape: Tape, clock: Clock, losses: Losses) -> None:
        super().__init__(COUNTER, self._taped, clock)
        self._tape, self._losses = tape, losses

    def session(self, send: Send) -> LineSession:
        """Return a session; it says nothing more once its link is to be lost."""
        return self._losses.session(self._interpreter.answer)

    def _initiate(self) -> None:
        if not self._losses.strike():
            super()._initiate()

    def _taped(self, open_ns: int, close_ns: int) -> tuple[float, float, int]:
        reading = self._tape.now()
        if reading is None:
            return 0.0, 0.0, 1
        return reading.values[0], (reading.values_var or (0.0,))[0], reading.repeats


class ReplayBench:
    """The instruments of a replay on its clock; implements `daq.ports.Bench`."""

    def __init__(self, clock: VirtualClock, hosts: Mapping[str, Host]) -> None:
        self.clock = clock
        self._hosts = hosts

    def true_rates_hz(
        self, openings: Sequence[int], positions_mm: Sequence[float]
    ) -> Sequence[Sequence[float]]:
        """Return no number: an archive does not know the truth behind its counts."""
        return [[float("nan")] * len(openings) for _ in positions_mm]

    def free_bytes(self) -> float:
        """Return that a replay has no say in the room on the disk."""
        return float("inf")

    def turn(self, knob: str, value: float) -> None:
        """Turn nothing: an archive holds what was."""

    def keep(self) -> bytes:
        """Return nothing: a replay begins at its beginning."""
        return b""

    def close(self) -> None:
        """Stop the hosts and let their ports go."""
        for host in self._hosts.values():
            host.close()


def open_bench(
    rig: Rig,
    *,
    seed: int | None,
    transport: Literal["tcp", "direct"],
    state: bytes | None,
    faults: Mapping[str, Any] | None = None,
) -> ReplayBench:
    """Return the bench of a replay.

    Parameters
    ----------
    rig
        With a table [bench] that holds `tape` (`readings`, `due`, `lost_before`) and `times` (how much faster
        than the wall clock, None for as fast as it goes); a counter and one controller for all axes.
    seed, state
        Not needed: nothing is drawn, and a replay begins at its beginning.
    transport
        "tcp" (loopback sockets) or "direct" (in process); both carry the same bytes.
    faults
        A fault script to lay over what is replayed.
    """
    table: Mapping[str, Any] = rig.bench or {}
    if "tape" not in table:
        raise DescriptionError(
            (f"rig {rig.name}, bench.model: 'replay' is for `tercet replay`. Name 'wavelets' to rehearse.",)
        )
    tape = Tape(**table["tape"])
    first = tape.readings[0]
    origin_ns, times = first.utc_ns - first.gate_open_ns, table["times"]
    clock = VirtualClock(origin_ns) if times is None else PacedClock(origin_ns, times)
    script = None if faults is None else read_script(faults, rig)
    upsets = None if script is None else Upsets(clock, clock.step_utc)
    tracks = {name: TapedTrack(name, tape, axis.limits_mm[0]) for name, axis in rig.axes.items()}
    hosts: dict[str, Host] = {}
    instruments = _instruments(rig, tape, clock, tracks, lambda: _cut(clock, hosts))
    for name, instrument in instruments.items():
        served = instrument if upsets is None else Spoilt(name, instrument, upsets, clock)
        hosts[name] = serve(clock, rig.devices[name].address, served, transport)
    if upsets and script:
        upsets.begin(script, hosts, instruments, tracks)
    _step_utc(clock, tape.readings)
    return ReplayBench(clock, hosts)


def _instruments(
    rig: Rig, tape: Tape, clock: VirtualClock, tracks: Mapping[str, Track], lose: Callable[[], None]
) -> dict[str, Instrument]:
    letters = {axis.letter: tracks[name] for name, axis in rig.axes.items()}
    travels = {axis.letter: Travel(axis.limits_mm, axis.speed_mm_s) for axis in rig.axes.values()}
    power = rig.devices[COUNTER].driver == "dialect"
    return {
        STAGES: StageController(letters, travels, clock),
        COUNTER: (TapedPowerMeter if power else TapedCounter)(tape, clock, Losses(tape, lose)),
    }


def _cut(clock: VirtualClock, hosts: Mapping[str, Host]) -> None:
    """End the counter's connection, which may be opened again at once."""

    def act() -> None:
        hosts[COUNTER].close()
        hosts[COUNTER].open()

    clock.call_at(clock.now_ns(), act)


def _step_utc(clock: VirtualClock, readings: Sequence[Reading]) -> None:
    """Let UTC jump where the archive says that it did, between two gates."""
    for before, reading in pairwise(readings):
        step_ns = (reading.utc_ns - before.utc_ns) - (reading.gate_open_ns - before.gate_open_ns)
        if step_ns:
            clock.call_at(reading.gate_open_ns, partial(clock.step_utc, step_ns))
