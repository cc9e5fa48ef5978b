"""The bench of the planning studies: three equal slits, in units of slit width, and what an order costs."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import permutations

import numpy as np

from daq.estimate.arrays import FloatArray, IntArray
from daq.itinerary import Wander, wander_variance
from daq.itinerary.cost import Pattern, exposures_s, pattern_of
from daq.itinerary.moves import start_times_s
from daq.itinerary.orders import Order

NIGHT_S, COUNTS = 36_000.0, 1e9  # counts of a night without moves
POSITIONS = 41
NATURAL = (0, 1, 2, 4, 3, 5, 6, 7)  # none A B C AB AC BC ABC, as bit masks
CHANGE_S = 0.32  # detector, one step


def pattern(positions: int = POSITIONS, background: float = 0.02) -> Pattern:
    """Return the pattern of slits of width 1 and pitch 3 at u = -0.8 .. 0.8, background in single slits."""
    u = np.linspace(-0.8, 0.8, positions)
    columns = [
        np.abs(sum((_slit(u, slit) for slit in range(3) if mask >> slit & 1), np.zeros(u.shape, complex)))
        ** 2
        for mask in range(8)
    ]
    rates = np.stack(columns, axis=-1) + background
    rates *= COUNTS / NIGHT_S / rates.mean()
    return pattern_of(rates, np.arange(8), 3, "pairwise", counts=False)


def _slit(u: FloatArray, slit: int) -> FloatArray:
    return np.asarray(np.sinc(u) * np.exp(2j * np.pi * u * 3 * (slit - 1)))


@dataclass(frozen=True, slots=True)
class Machine:
    """A mask translator: settling and time a slot, and which opening stands in which slot."""

    settle_s: float
    slot_s: float
    layout: tuple[int, ...] = NATURAL

    @property
    def between_s(self) -> FloatArray:
        """Time from opening to opening, (8, 8) [s]; none for the same one."""
        at = np.empty(8)
        at[list(self.layout)] = np.arange(8)
        move_s = self.settle_s + self.slot_s * np.abs(at[:, None] - at)
        np.fill_diagonal(move_s, 0.0)
        return np.asarray(move_s)


@dataclass(frozen=True, slots=True)
class Timed:
    """An order with its times; gates as points in their middle (`width` 0) or with their width (1)."""

    weight: FloatArray
    start_s: FloatArray
    dwell_s: FloatArray
    total_s: float
    counting_var: float

    def drift_var(self, wander: Wander, width: float) -> float:
        """Return the variance of kappa that a wander of the log rate brings."""
        middle_s = self.start_s + self.dwell_s / 2
        dwell_s = width * self.dwell_s
        return wander_variance(self.weight, middle_s - dwell_s / 2, dwell_s, wander)

    def error(self, log_rate: FloatArray) -> float:
        """Return the error of kappa for a log rate at the middle of each visit."""
        return float(self.weight @ log_rate)


def timed(of: Pattern, order: Order, machine: Machine, dwell_s: float) -> Timed:
    """Return an order with its times on a machine, every visit as long."""
    step = np.abs(np.diff(order.position))
    detector_s = np.where(step > 0, CHANGE_S - 0.02 + 0.02 * step, 0.0)
    gap_s = np.maximum(machine.between_s[order.opening[:-1], order.opening[1:]], detector_s)
    dwell = np.full(order.opening.size, dwell_s)
    start_s = start_times_s(dwell, gap_s)
    exposure_s = exposures_s(order.position, order.opening, dwell, of.rates_hz.shape)
    return Timed(
        weight=of.visit_weights(order.position, order.opening, dwell),
        start_s=start_s,
        dwell_s=dwell,
        total_s=float(start_s[-1] + dwell_s),
        counting_var=float(of.counting_variances(exposure_s, 0.0).sum()),
    )


def ideal(of: Pattern) -> float:
    """Return time x variance without moves and drift, equal dwell."""
    seconds = np.ones(of.rates_hz.shape)
    return float(of.counting_variances(seconds, 0.0).sum() * seconds.sum())


def q_of(of: Pattern, found: Timed, wander: Wander, width: float) -> float:
    """Return time x variance over the ideal."""
    return found.total_s * (found.counting_var + found.drift_var(wander, width)) / ideal(of)


def all_orders() -> IntArray:
    """Return the 40 320 orders of eight openings."""
    return np.array(list(permutations(range(8))))
