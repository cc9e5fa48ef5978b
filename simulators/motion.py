"""Motion: where a simulated axis is and was, as a function of time; nothing here runs by itself."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, replace

NS = 1_000_000_000

_KEPT = 256  # legs that a gate may look back on


@dataclass(frozen=True, slots=True)
class Leg:
    """One straight move at one speed."""

    start_ns: int
    stop_ns: int
    start_mm: float
    stop_mm: float

    def place_mm(self, at_ns: int) -> float:
        """Return where the axis is at a time; before the leg at its start, after it at its end [mm]."""
        if at_ns >= self.stop_ns:
            return self.stop_mm
        share = max(at_ns - self.start_ns, 0) / (self.stop_ns - self.start_ns)
        return self.start_mm + share * (self.stop_mm - self.start_mm)


class Track:
    """The legs of one axis: where it truly is, and what it knows of that.

    Parameters
    ----------
    place_mm
        Where it truly stands at the beginning [mm].
    reference_mm
        Where its reference switch is [mm].
    homed
        Whether it knows where it is; an axis that does not counts from where it was switched on.
    """

    def __init__(self, place_mm: float, reference_mm: float, homed: bool) -> None:
        self._legs = deque([Leg(0, 0, place_mm, place_mm)], maxlen=_KEPT)
        self._reference_mm = reference_mm
        self._homed_at_ns: int | None = 0 if homed else None
        self._zero_mm = 0.0 if homed else place_mm
        self._target_mm = place_mm
        self._hidden_mm = 0.0  # how far it has slipped behind its encoder's back

    def true_mm(self, at_ns: int) -> float:
        """Return where the axis truly is at a time, also one that is past (the last 256 legs) [mm]."""
        for leg in reversed(self._legs):
            if leg.start_ns <= at_ns:
                return leg.place_mm(at_ns)
        return self._legs[0].start_mm

    def last_leg(self, at_ns: int) -> Leg:
        """Return the leg that the axis is on, or has last come to its end of; one of no length is none."""
        for leg in reversed(self._legs):
            if leg.start_ns <= at_ns and leg.start_mm != leg.stop_mm:
                return leg
        return self._legs[0]

    def shown_mm(self, at_ns: int) -> float:
        """Return where the axis believes to be [mm]; before homing that is a count from an unknown zero."""
        return self.true_mm(at_ns) - self._offset_mm(at_ns)

    def target_mm(self, at_ns: int) -> float:
        """Return where it was sent, or was stopped, as the axis believes it [mm]."""
        return self._target_mm - self._offset_mm(at_ns)

    def moving(self, at_ns: int) -> bool:
        """Return whether a leg is under way."""
        return at_ns < self._legs[-1].stop_ns

    def homed(self, at_ns: int) -> bool:
        """Return whether the axis has found its reference."""
        return self._homed_at_ns is not None and at_ns >= self._homed_at_ns

    def go(self, at_ns: int, target_mm: float, speed_mm_s: float) -> None:
        """Start a leg to a place, as the axis believes it once it is homed [mm]."""
        self._go(at_ns, target_mm + self._hidden_mm, speed_mm_s)

    def _go(self, at_ns: int, target_mm: float, speed_mm_s: float) -> None:
        here_mm, self._target_mm = self.true_mm(at_ns), target_mm
        arrival_ns = at_ns + round(abs(target_mm - here_mm) / speed_mm_s * NS)
        self._legs.append(Leg(at_ns, arrival_ns, here_mm, target_mm))

    def home(self, at_ns: int, speed_mm_s: float) -> None:
        """Start a leg to the reference switch; arriving there is being homed."""
        if self.homed(at_ns):
            self._zero_mm = 0.0
        self._zero_mm, self._hidden_mm = self._zero_mm + self._hidden_mm, 0.0
        self._go(at_ns, self._reference_mm, speed_mm_s)
        self._homed_at_ns = self._legs[-1].stop_ns

    def stop(self, at_ns: int) -> None:
        """End the leg under way where the axis is; a search for the reference then finds none."""
        if not self.moving(at_ns):
            return
        self.stall(at_ns)
        self._target_mm = self._legs[-1].stop_mm

    def stall(self, at_ns: int) -> None:
        """End the leg under way where the axis is, which the axis does not know: its target stays."""
        if not self.moving(at_ns):
            return
        if not self.homed(at_ns):
            self._homed_at_ns = None
        self._legs[-1] = replace(self._legs[-1], stop_ns=at_ns, stop_mm=self.true_mm(at_ns))

    def slip(self, at_ns: int, by_mm: float, *, seen: bool) -> None:
        """Move the axis, and the rest of its leg, at once by some way, `seen` by its encoder or not."""
        leg, here_mm = self._legs[-1], self.true_mm(at_ns)
        if self.moving(at_ns):
            self._legs[-1] = replace(leg, stop_ns=at_ns, stop_mm=here_mm)
        stop_ns = max(leg.stop_ns, at_ns)
        self._legs.append(Leg(at_ns, stop_ns, here_mm + by_mm, leg.stop_mm + by_mm))
        if not seen:
            self._hidden_mm += by_mm
            self._target_mm += by_mm

    def _offset_mm(self, at_ns: int) -> float:
        return self._hidden_mm + (0.0 if self.homed(at_ns) else self._zero_mm)

    def moments(self, start_ns: int, stop_ns: int) -> Iterator[int]:
        """Yield the times between two times at which the axis starts or stops."""
        for leg in reversed(self._legs):
            if leg.stop_ns <= start_ns:
                return
            yield from (at for at in (leg.start_ns, leg.stop_ns) if start_ns < at < stop_ns)
