"""Levels: how the source stood from stand to stand, and the random walk that it looks like."""

from __future__ import annotations

import numpy as np

from daq.estimate.arrays import FloatArray, added
from daq.estimate.plan import Plan
from daq.estimate.sensitivity import Taken, by_cell
from daq.estimate.tables import over
from daq.estimate.visits import Visits
from daq.estimate.walk import likeliest_per_s

ROUNDS = 4  # of rates and levels in turn; lost visits are few, so each round gains two digits


def levels(visits: Visits, plan: Plan, taken: Taken) -> tuple[FloatArray, FloatArray]:
    """Return the level of each stand with a visit taken (by stand number, 1 on average), and its variance.

    Value over what the stand's own visits would give at the mean rates; these are made again with the levels
    a few times, since openings that lost visits saw another mean of the source. NaN for other stands.
    """
    stand = plan.stand[taken.visit]
    cell = (plan.position[taken.visit], plan.opening[taken.visit])
    value, live = visits.value[taken.visit], visits.live[taken.visit]
    rates, level = taken.rates, np.ones(0)
    for _ in range(ROUNDS):
        expected = added(stand, live * rates[cell])
        level = over(added(stand, value), expected, np.nan)
        level = level / np.nanmean(level)
        strength = by_cell(plan, taken.visit, live * level[stand])
        rates = over(by_cell(plan, taken.visit, value), strength)
    variance = added(stand, visits.variance[taken.visit])
    return level, over(variance, added(stand, live * rates[cell]) ** 2, np.nan)


def walk_per_s(visits: Visits, plan: Plan, taken: Taken) -> float:
    """Return the variance per second of the source's log as a random walk, from the levels of the stands."""
    level, variance = levels(visits, plan, taken)
    stand = plan.stand[taken.visit]
    many = np.bincount(stand).astype(float)
    time_s = over(added(stand, visits.middle_s[taken.visit]), many, np.nan)
    known = np.flatnonzero((level > 0) & (variance > 0))
    known = known[np.argsort(time_s[known], kind="stable")]
    step_s = np.diff(time_s[known])
    if len(known) < 3 or not np.all(step_s > 0):
        return 0.0
    return likeliest_per_s(level[known] ** 2 / variance[known], np.log(level[known]), step_s)


def walk_variance(visits: Visits, taken: Taken, per_s: float) -> float:
    """Return the variance of the plain kappa under a random walk of so much variance a second."""
    step_s = np.diff(visits.middle_s[taken.visit])
    return float(per_s * np.sum(step_s * np.cumsum(taken.weight)[:-1] ** 2))
