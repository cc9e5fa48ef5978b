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

    def true_mm(self, at_ns: int) -> float:
        """Return where the axis truly is at a time, also one that is past (the last 256 legs) [mm]."""
        for leg in reversed(self._legs):
            if leg.start_ns <= at_ns:
                return leg.place_mm(at_ns)
        return self._legs[0].start_mm

    def shown_mm(self, at_ns: int) -> float:
        """Return where the axis believes to be [mm]; before homing that is a count from an unknown zero."""
        return self.true_mm(at_ns) - (0.0 if self.homed(at_ns) else self._zero_mm)

    def target_mm(self, at_ns: int) -> float:
        """Return the end of the last leg, as the axis believes it [mm]."""
        return self._legs[-1].stop_mm - (0.0 if self.homed(at_ns) else self._zero_mm)

    def moving(self, at_ns: int) -> bool:
        """Return whether a leg is under way."""
        return at_ns < self._legs[-1].stop_ns

    def homed(self, at_ns: int) -> bool:
        """Return whether the axis has found its reference."""
        return self._homed_at_ns is not None and at_ns >= self._homed_at_ns

    def go(self, at_ns: int, target_mm: float, speed_mm_s: float) -> None:
        """Start a leg to a true place [mm]."""
        here_mm = self.true_mm(at_ns)
        arrival_ns = at_ns + round(abs(target_mm - here_mm) / speed_mm_s * NS)
        self._legs.append(Leg(at_ns, arrival_ns, here_mm, target_mm))

    def home(self, at_ns: int, speed_mm_s: float) -> None:
        """Start a leg to the reference switch; arriving there is being homed."""
        if self.homed(at_ns):
            self._zero_mm = 0.0
        self.go(at_ns, self._reference_mm, speed_mm_s)
        self._homed_at_ns = self._legs[-1].stop_ns

    def stop(self, at_ns: int) -> None:
        """End the leg under way where the axis is; a search for the reference then finds none."""
        if not self.moving(at_ns):
            return
        if not self.homed(at_ns):
            self._homed_at_ns = None
        cut = replace(self._legs[-1], stop_ns=at_ns, stop_mm=self.true_mm(at_ns))
        self._legs[-1] = cut

    def moments(self, start_ns: int, stop_ns: int) -> Iterator[int]:
        """Yield the times between two times at which the axis starts or stops."""
        for leg in reversed(self._legs):
            if leg.stop_ns <= start_ns:
                return
            yield from (at for at in (leg.start_ns, leg.stop_ns) if start_ns < at < stop_ns)
