"""Shift: when the level of the source began to change, by how much, and whether at once or slowly."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from math import sqrt

import numpy as np

from daq.estimate.arrays import FloatArray

K, H = 0.5, 9.06  # a CUSUM of stands of 22 s with these alarms once a week on a steady source
REFERENCE = 20  # stands that tell the level before the first is held against them
AFTER = 10  # stands after the alarm before it is said what it was
WINDOW = 120  # stands that are looked at then
NEAR, JUMP_SIGMA = 3, 3.5  # a sudden change stands out among the differences of so many stands each
TO_SIGMA = 1.4826  # median absolute deviation of a normal distribution


@dataclass(frozen=True, slots=True)
class Shift:
    """A change of level: relative size, hours of measuring after the start, sudden or slow."""

    size: float
    hours: float
    sudden: bool


@dataclass(slots=True)
class ShiftChart:
    """A self-starting CUSUM of the stands' levels, begun anew after each alarm; `last` is the latest change.

    Each stand is held against the mean of all stands since the start, whose own error is allowed for. Such
    scores are independent, so a steady source alarms as rarely as against a level that is known. The variance
    of counts follows from the mean, not from the count itself: a low count must not weigh more.

    References
    ----------
    .. [1] "Self-starting cusum charts for location and scale", The Statistician 36, 299 (1987); the scores
       are the recursive residuals of "Techniques for testing the constancy of regression relationships over
       time", J. R. Stat. Soc. B 37, 149 (1975). Both from memory; the studies show the run length.
    """

    k: float = K
    h: float = H
    last: Shift | None = None
    _levels: list[float] = field(default_factory=list)
    _variances: list[float] = field(default_factory=list)
    _hours: list[float] = field(default_factory=list)
    _weight: float = 0.0
    _mean: float = 0.0
    _high: float = 0.0
    _low: float = 0.0
    _alarm: int | None = None

    def add(self, level: float, variance: float, hours: float) -> bool:
        """Take in the level of a stand with its counting variance; return whether a change was told apart."""
        if variance <= 0:
            return False
        if self._alarm is None and self._moved(level, level / variance):
            self._alarm = len(self._levels)
        self._levels.append(level)
        self._variances.append(variance)
        self._hours.append(hours)
        if self._alarm is None or len(self._levels) <= self._alarm + AFTER:
            return False
        lately = slice(-WINDOW, None)
        self.last = told_apart(self._levels[lately], self._variances[lately], self._hours[lately])
        self._again()
        return True

    def _moved(self, level: float, weight: float) -> bool:
        """Take one step of the chart; return whether it alarms."""
        if len(self._levels) >= REFERENCE:
            score = (level - self._mean) / sqrt(self._mean * (1 / weight + 1 / self._weight))
            self._high = max(0.0, self._high + score - self.k)
            self._low = max(0.0, self._low - score - self.k)
        self._weight += weight
        self._mean += (level - self._mean) * weight / self._weight
        return max(self._high, self._low) > self.h

    def _again(self) -> None:
        self._levels, self._variances, self._hours = [], [], []
        self._weight = self._mean = self._high = self._low = 0.0
        self._alarm = None


def told_apart(levels: Sequence[float], variances: Sequence[float], hours: Sequence[float]) -> Shift:
    """Return the change in a row of levels: a step where two levels fit better than a bent line, or a slope.

    Both models have three parameters: the moment, the level before, and the step or the slope after.
    """
    values, weights = np.asarray(levels, float), 1 / np.asarray(variances, float)
    time = np.asarray(hours, float)
    edges = range(2, len(values) - 1)
    steps = [_fit(values, weights, (np.arange(len(values)) >= edge).astype(float)) for edge in edges]
    bends = [_fit(values, weights, np.maximum(time - time[edge - 1], 0.0)) for edge in edges]
    best = int(np.argmin([fit[0] for fit in steps]))
    bend = int(np.argmin([fit[0] for fit in bends]))
    sudden = steps[best][0] < bends[bend][0] and _stands_out(values, edges[best])
    if sudden:
        return Shift(steps[best][2] / steps[best][1], float(time[edges[best]]), True)
    begins = float(time[edges[bend] - 1])
    return Shift(bends[bend][2] * (float(time[-1]) - begins) / bends[bend][1], begins, False)


def _stands_out(values: FloatArray, edge: int) -> bool:
    """Return whether the level jumps at an edge as it does nowhere else: a source that walks jumps too.

    Jumps are differences between the means of a few stands before and after; their spread is the yardstick.
    """
    places = range(NEAR, len(values) - NEAR + 1)
    jumps = np.array([values[at : at + NEAR].mean() - values[at - NEAR : at].mean() for at in places])
    if not len(jumps):
        return False
    middle = float(np.median(jumps))
    spread = TO_SIGMA * float(np.median(np.abs(jumps - middle)))
    here = jumps[min(max(edge - NEAR, 0), len(jumps) - 1)]
    return bool(abs(here - middle) > JUMP_SIGMA * spread)


def _fit(values: FloatArray, weights: FloatArray, shape: FloatArray) -> tuple[float, float, float]:
    """Return chi-squared, the level and the factor of a shape added to it, by weighted least squares."""
    total = weights.sum()
    level, middle = (weights * values).sum() / total, (weights * shape).sum() / total
    spread = float((weights * (shape - middle) ** 2).sum())
    if spread <= 0:
        return float("inf"), float(level), 0.0
    factor = float((weights * (shape - middle) * (values - level)).sum() / spread)
    base = float(level - factor * middle)
    return float((weights * (values - base - factor * shape) ** 2).sum()), base, factor
