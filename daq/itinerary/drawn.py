"""Drawn: a course of the source that wanders as a plan expects it to, for a rehearsal."""

from __future__ import annotations

import numpy as np

from daq.itinerary.orders import FloatArray
from daq.itinerary.wander import Wander


def drawn_level(wander: Wander, time_s: FloatArray, generator: np.random.Generator) -> FloatArray:
    """Return the strength of the source at evenly spaced times, 1 at the first, drawn from its wander.

    Parameters
    ----------
    wander
        Structure function of the log rate: random walk, slope of unknown sign, wandering about a mean, lines.
    time_s
        Evenly spaced [s], from the first on.
    """
    step_s, many = float(time_s[1] - time_s[0]), len(time_s)
    log_rate = np.sqrt(wander.walk_per_s * step_s) * np.cumsum(generator.standard_normal(many))
    log_rate += np.sqrt(wander.ramp_per_s2) * generator.standard_normal() * time_s
    for variance, relax_s in wander.relaxing:
        log_rate += _relaxing(variance, step_s / relax_s, generator.standard_normal(many))
    for size, period_s in wander.lines:
        log_rate += size * np.sin(2 * np.pi * (time_s / period_s + generator.random()))
    return np.exp(log_rate - log_rate[0])


def _relaxing(variance: float, step: float, draws: FloatArray) -> FloatArray:
    """Return an Ornstein-Uhlenbeck process, exact at every step of so many relaxation times."""
    kept = float(np.exp(-step))
    kicks = np.sqrt(variance * -np.expm1(-2 * step)) * draws
    level = np.empty(len(draws))
    level[0] = np.sqrt(variance) * draws[0]
    for at in range(1, len(draws)):
        level[at] = kept * level[at - 1] + kicks[at]
    return level
