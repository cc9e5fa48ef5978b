"""Quality: the rules of a night, each a pure function of a visit's or a stand's own record.

Rules look first at what is not the count of one opening. Those that look at counts have thresholds so far out
that cutting there moves the mean by less than can be seen.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from math import ceil, log
from typing import Any

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import chdtrc, chdtri

from daq.estimate.arrays import FloatArray, IntArray
from daq.records import Quality, Reading

LEAST_IN_SLICE = 10.0  # counts; thinner slices are merged with their neighbours
LEAST_IN_CELL = 5.0  # expected counts; thinner cells are merged, the smallest first


@dataclass(frozen=True, slots=True)
class Limit:
    """A band that a sensor's quantity has to keep; an `interlock` is cleared at the bench only.

    Otherwise the run goes on by itself when the quantity has been good for `settle_s`.
    """

    above: float | None = None
    below: float | None = None
    settle_s: float = 60.0
    interlock: bool = False

    def holds(self, value: float) -> bool:
        """Return whether a value lies within; one that is not a number does not."""
        low = self.above is None or value >= self.above
        return low and (self.below is None or value <= self.below) and value == value

    def words(self) -> str:
        """Return the band in words."""
        low = "" if self.above is None else f"at least {self.above:g}"
        high = "" if self.below is None else f"at most {self.below:g}"
        return f"and has to be {' and '.join(filter(None, (low, high)))}"


@dataclass(frozen=True, slots=True)
class Rules:
    """Thresholds, frozen with the run; keys and meaning as in the table [quality] of the description."""

    fingerprint_p: float = 6.4e-5
    dispersion_p: float = 8e-6
    no_counts_p: float = 8e-6
    monitor_sigma: float = 4.5
    gate_time: float = 1e-3
    clock_step_s: float = 0.5
    counter_range: float | None = None
    full_range: float = 0.9
    overload_hz: float | None = None
    rate_band: tuple[float, float] = (0.5, 1.5)
    lap_p: float = 1 / 380
    settle_sigma: float = 4.0
    limits: Mapping[str, Limit] = field(default_factory=dict)


def rules_of(table: Mapping[str, Any]) -> Rules:
    """Return the rules that a run's record holds as a table."""
    limits = {name: Limit(**limit) for name, limit in table.get("limits", {}).items()}
    return Rules(**{**table, "limits": limits})


@dataclass(frozen=True, slots=True)
class Spread:
    """Chi-squared of counts about what they should be, and its degrees of freedom (0: cannot tell).

    `worst`: index of the cell that adds most.
    """

    chi2: float
    dof: int
    worst: int = -1

    @property
    def ratio(self) -> float:
        """Chi-squared over its median; one on a quiet night."""
        return self.chi2 / float(chdtri(self.dof, 0.5)) if self.dof else 1.0

    def beyond(self, p: float, scale: float = 1.0) -> bool:
        """Return whether it is less probable than p, after division by the night's own scale."""
        return bool(self.dof) and float(chdtrc(self.dof, self.chi2 / scale)) < p


def encoder_bits(
    target_mm: Mapping[str, float],
    ends_mm: Mapping[str, tuple[float, float]],
    tolerance_mm: Mapping[str, float],
) -> Quality:
    """Return what encoders at opening and closing of the gate say, by axis, against target and tolerance."""
    quality = Quality.GOOD
    for axis, tolerance in tolerance_mm.items():
        opened, closed = ends_mm[axis]
        if max(abs(opened - target_mm[axis]), abs(closed - target_mm[axis])) > tolerance:
            quality |= Quality.OFF_TARGET
        if abs(closed - opened) > tolerance:
            quality |= Quality.MOVED
    return quality


def counter_bits(reading: Reading, rules: Rules, expected: float | None) -> Quality:
    """Return what the counter's own numbers say: live time, range, none where `expected` counts are due."""
    quality = Quality.GOOD
    if abs(reading.live_s - reading.dwell_s) > rules.gate_time * reading.dwell_s:
        quality |= Quality.GATE_TIME
    if rules.counter_range is not None and reading.values[0] > rules.full_range * rules.counter_range:
        quality |= Quality.OVERFLOW
    if expected is not None and reading.values[0] == 0 and expected > -log(rules.no_counts_p):
        quality |= Quality.NO_COUNTS
    return quality


def clock_bits(before: Reading | None, reading: Reading, rules: Rules) -> Quality:
    """Return whether UTC jumped against the run clock since the reading before."""
    if before is None:
        return Quality.GOOD
    step_ns = (reading.utc_ns - before.utc_ns) - (reading.gate_open_ns - before.gate_open_ns)
    return Quality.CLOCK_STEP if abs(step_ns) > rules.clock_step_s * 1e9 else Quality.GOOD


def sensor_bits(reading: Reading, rules: Rules) -> Quality:
    """Return whether a sensor was out of its band."""
    for name, limit in rules.limits.items():
        seen = reading.sensors.get(name)
        if seen is not None and not limit.holds(seen[0]):
            return Quality.SENSOR
    return Quality.GOOD


def dispersion(slices: Sequence[float], least: float = LEAST_IN_SLICE) -> Spread:
    """Return how a visit's equal slices scatter about an even rate, neighbours merged to so many counts each.

    References
    ----------
    .. [1] "Radiation Detection and Measurement", 4th ed., ch. 3 (index of dispersion).
    """
    counts = np.asarray(slices, float)
    total, many = float(counts.sum()), len(counts)
    if total <= 0:
        return Spread(0.0, 0)
    each = max(1, ceil(least * many / total))
    starts = np.arange(0, max(many - each + 1, 1), each)
    merged = np.add.reduceat(counts, starts)
    expected = np.diff(np.append(starts, many)) * total / many
    parts = (merged - expected) ** 2 / expected
    return Spread(float(parts.sum()), len(merged) - 1, int(np.argmax(parts)))


def fingerprint(
    counts: ArrayLike, exposure: ArrayLike, earlier: ArrayLike, earlier_exposure: ArrayLike
) -> Spread:
    """Return how the counts of a stand fit earlier counts at its position, whatever the source did between.

    Parameters
    ----------
    counts, exposure
        By opening: corrected counts and live seconds of the stand.
    earlier, earlier_exposure
        The same, added up over the stands kept before.

    Notes
    -----
    Homogeneity of a 2 x K table with a free ratio of strengths; cells are merged in ascending order until
    both expected counts are five. One degree of freedom is the ratio.

    References
    ----------
    .. [1] Common practice: chi-squared test of homogeneity of a contingency table.
    """
    table = np.array([counts, earlier], float)
    time = np.array([exposure, earlier_exposure], float)
    if not (np.all(time > 0) and np.all(table.sum(axis=1) > 0)):
        return Spread(0.0, 0)
    share = _shares(table, time)
    cells = _merged(table.sum(axis=0) * np.minimum(share, 1 - share))
    both = np.bincount(cells, table.sum(axis=0))
    expected = np.bincount(cells, table.sum(axis=0) * share)
    rest = np.bincount(cells, table[0]) - expected
    parts = rest**2 / np.maximum(expected * (1 - expected / both), 1e-300)
    worst = int(np.flatnonzero(cells == np.argmax(parts))[0])
    return Spread(float(parts.sum()), len(parts) - 1, worst)


def _shares(table: FloatArray, time: FloatArray) -> FloatArray:
    """Return which share of each opening's counts is the stand's, for the likeliest ratio of strengths."""
    strength = table.sum(axis=1) / time.sum(axis=1)
    ratio = float(strength[0] / strength[1])
    both = table.sum(axis=0)
    for _ in range(6):  # at once where exposures are equal, else better by their inequality each time
        before, ratio = ratio, float(table[0].sum() / (time[0] @ (both / (ratio * time[0] + time[1]))))
        if abs(ratio - before) < 1e-12 * ratio:
            break
    return np.asarray(ratio * time[0] / (ratio * time[0] + time[1]))


def _merged(expected: FloatArray) -> IntArray:
    """Return the cell of every opening after merging thin ones, the smallest first."""
    order = np.argsort(expected, kind="stable")
    cells, cell, filled = np.zeros(len(expected), np.int64), 0, 0.0
    for place in order:
        cells[place] = cell
        filled += expected[place]
        if filled >= LEAST_IN_CELL:
            cell, filled = cell + 1, 0.0
    if filled and cell:  # what is left over goes to the cell before
        cells[cells == cell] = cell - 1
    return cells
