"""Stages: a simulated controller of linear axes that takes G-code words.

===================  =================================================================================
line                 reply
===================  =================================================================================
``G1 X4.0 F600``     ``taken`` once the move has begun (G0: at full speed; F in mm/min, it stays); a new
                     target takes the place of the one under way
``G4 P0.5``          ``taken``; no move is begun for so many seconds
``G28 X0``           ``taken``; X looks for its reference (G28 alone: every axis)
``G90``              ``taken``; positions are absolute, the only way here
``M0``               no reply, so that it may be sent across a dialogue: every axis stops where it is
``M100``             who it is: ``tercet-stages 1 axes XY``
``M101``             ``axes X 4.0000 4.0000 still homed, Y 0.0000 0.0000 moving lost, alarm none``:
                     target and encoder [mm] of each axis, the latter read to 0.0001 mm
``M102``             ``taken``; the alarm is cleared
anything else        ``refused 1 not a line of words`` and the like; nothing moves then
===================  =================================================================================

The words G0 G1 G4 G28 G90 M0 and their meaning are those of ISO 6983 and RS-274 (from memory); M100 to M102,
the replies and the refusals are this controller's own.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

from daq.ports import Clock
from simulators.gcode import Block, RefusalError, parse
from simulators.hosts import Send
from simulators.lines import LineSession
from simulators.motion import NS, Track

TAKEN = "taken"


@dataclass(frozen=True, slots=True)
class Travel:
    """What the controller allows an axis [mm], [mm/s]."""

    limits_mm: tuple[float, float]
    speed_mm_s: float


class StageController:
    """A controller; `tracks` and `travel` by axis letter. Its alarm is raised from outside, by a fault."""

    def __init__(self, tracks: Mapping[str, Track], travel: Mapping[str, Travel], clock: Clock) -> None:
        self.alarm = "none"
        self._tracks, self._travel, self._clock = tracks, travel, clock
        self._motion, self._feed_mm_min = "0", 0.0
        self._dwell_until_ns = 0
        self._plain: Mapping[str, Callable[[], str | None]] = {
            "0": self._stop,
            "100": lambda: f"tercet-stages 1 axes {''.join(tracks)}",
            "101": self._status,
            "102": self._clear,
        }

    def session(self, send: Send) -> LineSession:
        """Return a session; the controller never speaks unasked."""
        return LineSession(self._answer)

    def trip(self, alarm: str) -> None:
        """Stop every axis and raise an alarm (one word) that refuses every move until it is cleared."""
        self._stop()
        self.alarm = alarm

    def _answer(self, line: str) -> str | None:
        try:
            return self._obey(parse(line)) if line.strip() else None
        except RefusalError as refusal:
            return f"refused {refusal.number} {refusal.text}"

    def _obey(self, block: Block) -> str | None:
        if block.m:
            if len(block.m) > 1 or block.g or block.values or block.m[0] not in self._plain:
                raise RefusalError(1, "no such M word here")
            return self._plain[block.m[0]]()
        acts = [number for number in block.g if number != "90"]
        if len(acts) > 1 or not set(acts) <= {"0", "1", "4", "28"}:
            raise RefusalError(1, "no such G word here")
        self._feed(block)
        axes = {letter: value for letter, value in block.values.items() if letter not in "FP"}
        if not set(axes) <= set(self._tracks):
            raise RefusalError(1, "no such axis")
        return self._act(acts[0] if acts else self._motion, axes, block)

    def _feed(self, block: Block) -> None:
        feed_mm_min = block.values.get("F", self._feed_mm_min)
        if feed_mm_min < 0:
            raise RefusalError(2, "a negative speed")
        self._feed_mm_min = feed_mm_min

    def _act(self, act: str, axes: Mapping[str, float], block: Block) -> str | None:
        if act == "4":
            self._dwell_until_ns = self._clock.now_ns() + round(max(block.values.get("P", 0.0), 0.0) * NS)
        elif act == "28":
            self._home(axes or dict.fromkeys(self._tracks, 0.0))
        else:
            self._motion = act
            if axes:
                self._move(axes)
        return TAKEN

    def _home(self, axes: Mapping[str, float]) -> None:
        if any(axes.values()):
            raise RefusalError(2, "the reference has no other place than 0")
        now_ns = self._ready()
        for letter in axes:
            self._tracks[letter].home(now_ns, self._travel[letter].speed_mm_s)

    def _move(self, axes: Mapping[str, float]) -> None:
        now_ns = self._ready()
        for letter, target_mm in axes.items():
            low_mm, high_mm = self._travel[letter].limits_mm
            if not low_mm <= target_mm <= high_mm:
                raise RefusalError(3, f"{letter} target outside travel")
            if not self._tracks[letter].homed(now_ns):
                raise RefusalError(4, f"{letter} not homed")
        speeds = {letter: self._speed_mm_s(letter) for letter in axes}
        for letter, target_mm in axes.items():
            self._tracks[letter].go(now_ns, target_mm, speeds[letter])

    def _speed_mm_s(self, letter: str) -> float:
        most_mm_s = self._travel[letter].speed_mm_s
        if self._motion == "0":
            return most_mm_s
        speed_mm_s = self._feed_mm_min / 60
        if not 0 < speed_mm_s <= most_mm_s * (1 + 1e-9):
            raise RefusalError(2, f"{letter} cannot move at that speed")
        return speed_mm_s

    def _ready(self) -> int:
        now_ns = self._clock.now_ns()
        if self.alarm != "none":
            raise RefusalError(6, f"alarm {self.alarm}")
        if now_ns < self._dwell_until_ns:
            raise RefusalError(5, "still dwelling")
        return now_ns

    def _stop(self) -> None:
        now_ns = self._clock.now_ns()
        self._dwell_until_ns = 0
        for track in self._tracks.values():
            track.stop(now_ns)

    def _clear(self) -> str:
        self.alarm = "none"
        return TAKEN

    def _status(self) -> str:
        now_ns = self._clock.now_ns()
        axes = ", ".join(_axis(letter, track, now_ns) for letter, track in self._tracks.items())
        return f"axes {axes}, alarm {self.alarm}"


def _axis(letter: str, track: Track, now_ns: int) -> str:
    moving = "moving" if track.moving(now_ns) else "still"
    homed = "homed" if track.homed(now_ns) else "lost"
    return f"{letter} {track.target_mm(now_ns):.4f} {track.shown_mm(now_ns):.4f} {moving} {homed}"
