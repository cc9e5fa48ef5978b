"""Medians: a running median of a night, and the scale that it gives."""

from __future__ import annotations

from bisect import insort
from dataclasses import dataclass, field


@dataclass(slots=True)
class RunningMedian:
    """A running median, and a running scale that is never below one; it counts from `enough` values on."""

    enough: int
    values: list[float] = field(default_factory=list)

    def add(self, value: float) -> None:
        """Take in a value."""
        insort(self.values, value)

    @property
    def middle(self) -> float:
        """The median so far."""
        return self.values[len(self.values) // 2] if self.values else 0.0

    @property
    def scale(self) -> float:
        """The median as a scale: one while it is not known, or the night is quiet."""
        return max(1.0, self.middle) if len(self.values) >= self.enough else 1.0
