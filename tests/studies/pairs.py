"""Pairs of made-up nights: signed sums and divisors pair by pair; every few nights have their own coins."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from scipy.special import stdtrit

from daq.estimate import Sums
from daq.estimate.arrays import FloatArray, added
from daq.estimate.contrast import epsilon_and_delta
from daq.estimate.tables import plan_contrast
from tests.studies.bench import Night, night
from tests.studies.sources import SOURCES

TOGETHER = 20  # nights that share coins: one draw of a study


@dataclass(frozen=True, slots=True)
class Pairs:
    """By night and pair (N, B): weighted signed sum, divisor, and variance of the sum from counting."""

    epsilon: FloatArray
    delta: FloatArray
    variance: FloatArray

    def after(self, pairs: int) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return kappa, its jackknife and its counting standard error after so many pairs, by night."""
        e, d = self.epsilon[:, :pairs], self.delta[:, :pairs]
        total = d.sum(axis=1)
        kappa = e.sum(axis=1) / total
        without = (e.sum(axis=1)[:, None] - e) / (total[:, None] - d)
        squares = np.sum((without - without.mean(axis=1, keepdims=True)) ** 2, axis=1)
        se = np.sqrt((pairs - 1) / pairs * squares)
        return kappa, se, np.sqrt(self.variance[:, :pairs].sum(axis=1)) / total


def planned(positions: int, pairs: int, dwell_s: float, seed: int) -> Night:
    """Return a night with coins of a seed."""
    return night(
        positions__number=positions,
        itinerary__laps=2 * pairs,
        itinerary__dwell_s=dwell_s,
        itinerary__seed=seed,
    )


def counted(of: Night, source: str, generator: np.random.Generator, nights: int = TOGETHER) -> FloatArray:
    """Return the counts of some nights by visit."""
    strength = SOURCES[source](of.time_s, nights, generator)
    return np.asarray(generator.poisson(of.expected * strength), float)


def cells(of: Night, by_visit: FloatArray) -> FloatArray:
    """Return sums of one night by pair, position and opening."""
    shape = (of.plan.planned_pairs, *of.rates_hz.shape)
    cell = (of.plan.pair * shape[1] + of.plan.position) * shape[2] + of.plan.opening
    return added(cell, by_visit, int(np.prod(shape))).reshape(shape)


def sums_of_night(of: Night, counts: FloatArray) -> Sums:
    """Return the sums of one night."""
    value = cells(of, counts)
    return Sums(value, cells(of, of.dwell_s), value)


def pairs_of(of: Night, counts: FloatArray) -> Pairs:
    """Return the pairs of some nights; every cell of a pair has the same live time."""
    live = cells(of, of.dwell_s)
    what, signs = plan_contrast(of.plan)
    value = np.array([cells(of, one) for one in counts])
    epsilon, delta = epsilon_and_delta(value / live, what, of.plan.normalisation, signs)
    variance = (value / live**2) @ what.residual**2
    weights = of.plan.weights
    return Pairs(epsilon @ weights, delta @ weights, variance @ weights**2)


@lru_cache(maxsize=4096)
def quantile(pairs: int) -> float:
    """Return the two-sided 95 % quantile of Student's t for so many pairs."""
    return float(stdtrit(pairs - 1, 0.975))


def share(column: Any) -> dict[str, float]:
    """Return the share of nights and its simulation error."""
    values = np.asarray(column, float).ravel()
    mean = float(values.mean())
    return {"share": mean, "se": float(np.sqrt(max(mean * (1 - mean), 1e-12) / len(values)))}
