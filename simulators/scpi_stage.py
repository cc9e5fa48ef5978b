"""SCPI stage: a simulated controller of linear axes that is spoken to in SCPI, its setters silent.

==========================  ==============================================================================
command                     does
==========================  ==============================================================================
``MOVE:ABSolute X,4.0``     starts a move; -222 outside the travel, -221 before homing or during an alarm
``MOVE:HOME X``             looks for the reference of X
``MOVE:STOP``               stops every axis where it is
``MOVE:CLEar``              clears the alarm
``MOVE:STATe? X``           ``X,4.0000,3.9998,3``: target, encoder, and bits: 1 moving, 2 homed, 4 alarm
==========================  ==============================================================================

and the common and required commands of `simulators.status`. The command set is this controller's own.
"""

from __future__ import annotations

from collections.abc import Mapping

from daq.ports import Clock
from simulators.hosts import Send
from simulators.lines import LineSession
from simulators.motion import Track
from simulators.scpi import Command, FaultError, Interpreter, decimal
from simulators.stages import Travel
from simulators.status import Status

MOVING, HOMED, ALARM = 1, 2, 4


class ScpiStage:
    """Linear axes by letter; implements `simulators.hosts.Instrument`."""

    def __init__(
        self, name: str, tracks: Mapping[str, Track], travel: Mapping[str, Travel], clock: Clock
    ) -> None:
        self.alarm = False
        self._tracks, self._travel, self._clock = tracks, travel, clock
        status = Status(lambda: 0, lambda: bool(self._interpreter.responses))
        commands = {
            "*IDN?": Command(lambda: f"tercet simulators,linear stages {''.join(tracks)},{name},1"),
            "*RST": Command(self._stop),
            "MOVE:ABSolute": Command(self._move, (self._axis, decimal)),
            "MOVE:HOME": Command(self._home, (self._axis,)),
            "MOVE:STOP": Command(self._stop),
            "MOVE:CLEar": Command(self._clear),
            "MOVE:STATe?": Command(self._state, (self._axis,)),
        }
        self._interpreter = Interpreter({**status.commands(), **commands}, status.report)

    def session(self, send: Send) -> LineSession:
        """Return a session; the controller never speaks unasked."""
        return LineSession(self._interpreter.answer)

    def trip(self, alarm: str) -> None:
        """Stop every axis and refuse every move until the alarm is cleared; it has no word for the alarm."""
        self._stop()
        self.alarm = bool(alarm)

    def _axis(self, text: str) -> str:
        if text not in self._tracks:
            raise FaultError(-104)
        return text

    def _move(self, letter: str, target_mm: float) -> None:
        low_mm, high_mm = self._travel[letter].limits_mm
        now_ns = self._clock.now_ns()
        if not low_mm <= target_mm <= high_mm:
            raise FaultError(-222)
        if self.alarm or not self._tracks[letter].homed(now_ns):
            raise FaultError(-221)
        self._tracks[letter].go(now_ns, target_mm, self._travel[letter].speed_mm_s)

    def _home(self, letter: str) -> None:
        if self.alarm:
            raise FaultError(-221)
        self._tracks[letter].home(self._clock.now_ns(), self._travel[letter].speed_mm_s)

    def _stop(self) -> None:
        for track in self._tracks.values():
            track.stop(self._clock.now_ns())

    def _clear(self) -> None:
        self.alarm = False

    def _state(self, letter: str) -> str:
        now_ns, track = self._clock.now_ns(), self._tracks[letter]
        bits = MOVING * track.moving(now_ns) + HOMED * track.homed(now_ns) + ALARM * self.alarm
        return f"{letter},{track.target_mm(now_ns):.4f},{track.shown_mm(now_ns):.4f},{bits}"
