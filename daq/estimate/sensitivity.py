"""Sensitivity: what a change of the source during a visit does to kappa, and what the order makes of it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray, IntArray, added
from daq.estimate.contrast import divisor_gradient
from daq.estimate.plan import Plan
from daq.estimate.tables import measured, over, plan_contrast
from daq.estimate.visits import Visits, complete_pairs


@dataclass(frozen=True, slots=True)
class Taken:
    """The visits of complete pairs that are taken, in order of time (N).

    `visit`: which; `weight`: dkappa/dln(rate) of each in the plain contrast; `rates` (J, K) of their totals.
    """

    visit: IntArray
    weight: FloatArray
    rates: FloatArray


def taken_visits(visits: Visits, plan: Plan, chosen: BoolArray) -> Taken | None:
    """Return the chosen visits (V) of complete pairs; None where they give no kappa, or no times."""
    inside = chosen & np.isin(plan.pair, complete_pairs(visits, plan)) & (plan.pair >= 0)
    number = np.flatnonzero(inside)
    number = number[np.argsort(visits.middle_s[number], kind="stable")]
    value, live = (by_cell(plan, number, column[number]) for column in (visits.value, visits.live))
    rates, seen = over(value, live), measured(live)
    gradient = log_gradient(rates, seen, plan)
    if gradient is None or not np.isfinite(visits.middle_s[number]).all():
        return None
    cell = (plan.position[number], plan.opening[number])
    return Taken(number, gradient[cell] * visits.live[number] / live[cell], rates)


def log_gradient(rates: FloatArray, seen: BoolArray, plan: Plan) -> FloatArray | None:
    """Return dkappa/dln(rate) of every opening and position (J, K); None where kappa has no divisor."""
    gradient = rate_gradient(rates, seen, plan)
    return None if gradient is None else gradient * rates


def rate_gradient(rates: FloatArray, seen: BoolArray, plan: Plan) -> FloatArray | None:
    """Return dkappa/drate of every opening and position (J, K) [s]; None where kappa has no divisor."""
    what, signs = plan_contrast(plan)
    weights = np.where(seen, plan.weights, 0.0)
    slope = divisor_gradient(rates, weights, what, plan.normalisation, signs)
    total = float(np.sum(slope * rates))
    if not total > 0:
        return None
    value = float(np.sum(weights * (rates @ what.residual))) / total
    return np.asarray((weights[:, None] * what.residual - value * slope) / total)


def unbalance(visits: Visits, plan: Plan, taken: Taken) -> float:
    """Return how far the stands of the pairs are from mirroring one another: 0 mirrored, about 1 not at all.

    The first moment in time of each stand's weights, added up over every pair with its sign and without; the
    stands as they were performed, used or not.
    """
    number = _performed(visits, plan)
    stand, pair = plan.stand[number], plan.pair[number]
    gradient = log_gradient(taken.rates, np.ones(len(taken.rates), bool), plan)
    if gradient is None:
        return 1.0
    moment = gradient[plan.position[number], plan.opening[number]] * _within(visits.middle_s[number], stand)
    by_stand = added(stand, moment)
    pair_of = np.zeros(len(by_stand), np.int64)
    pair_of[stand] = pair
    total = np.abs(by_stand).sum()
    return float(np.abs(added(pair_of, by_stand)).sum() / total) if total > 0 else 0.0


def spread_out(visits: Visits, plan: Plan) -> bool:
    """Return whether the stands are interleaved: an opening swept over all positions, or counted en bloc."""
    number = _performed(visits, plan)
    stand, time_s = plan.stand[number], visits.middle_s[number]
    first, last = np.full((2, int(stand.max()) + 1), np.nan)
    np.fmin.at(first, stand, time_s)
    np.fmax.at(last, stand, time_s)
    return bool(np.nansum(last - first) > 2 * np.ptp(time_s))


def _performed(visits: Visits, plan: Plan) -> IntArray:
    """Return the visits of complete pairs in whole attempts, used or not."""
    return np.flatnonzero(np.isin(plan.pair, complete_pairs(visits, plan)) & np.isfinite(visits.middle_s))


def by_cell(plan: Plan, number: IntArray, column: FloatArray) -> FloatArray:
    """Return a column of visits added up by position and opening (J, K)."""
    shape = (len(plan.positions_mm), len(plan.openings))
    cell = plan.position[number] * shape[1] + plan.opening[number]
    return added(cell, column, shape[0] * shape[1]).reshape(shape)


def _within(time_s: FloatArray, stand: IntArray) -> FloatArray:
    """Return times less the mean time of their stand."""
    mean = over(added(stand, time_s), np.bincount(stand).astype(float))
    return np.asarray(time_s - mean[stand])
