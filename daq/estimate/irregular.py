"""Irregular: a run of any order and with gaps, by the joint fit, as tables and sums like any other run."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray, IntArray, added
from daq.estimate.joint import Fit, Series, fit, rates_without, standard_error
from daq.estimate.levels import levels
from daq.estimate.plan import Plan
from daq.estimate.sensitivity import Taken, log_gradient, taken_visits
from daq.estimate.sums import Taking, sums_of
from daq.estimate.tables import Tables, tables_of
from daq.estimate.visits import Visits

BLOCKS = 20  # of twice as many pairs and more: then neighbouring pairs are left out together


@dataclass(frozen=True, slots=True)
class Irregular:
    """The joint fit of a run.

    `tables` with refitted replicates, `strength` of the source by visit (V; 1 where it was not fitted),
    `model_se` the standard error of the model, `per_s` the walk's variance per second, `work` as in `Fit`.
    """

    tables: Tables
    strength: FloatArray
    model_se: float
    per_s: float
    work: int


def irregular(visits: Visits, plan: Plan) -> Irregular | None:
    """Return the joint fit over every good visit of complete pairs; None where there is no kappa."""
    taken = taken_visits(visits, plan, visits.good)
    if taken is None or not np.all(np.diff(visits.middle_s[taken.visit]) > 0):
        return None
    series = series_of(visits, plan, taken)
    found = fit(series)
    strength = np.ones(len(visits.value))
    strength[taken.visit] = np.exp(found.level)
    chosen = Taking(visits.good & (plan.stand >= 0), strength, np.zeros(len(strength)))
    tables = tables_of(sums_of(visits, plan, chosen))
    gradient = log_gradient(tables.rates, tables.measured, plan)
    if gradient is None:
        return None
    model_se = standard_error(series, found, gradient.ravel())
    return Irregular(_refitted(tables, series, found), strength, model_se, found.per_s, found.work)


def series_of(visits: Visits, plan: Plan, taken: Taken) -> Series:
    """Return taken visits as a series for the joint fit; it starts from the levels of the stands."""
    number = taken.visit
    cells = len(plan.positions_mm) * len(plan.openings)
    cell = plan.position[number] * len(plan.openings) + plan.opening[number]
    level, _ = levels(visits, plan, taken)
    start = level[plan.stand[number]]
    return Series(
        cell=cell,
        value=visits.value[number],
        exposure=visits.live[number],
        spread=_spread(cell, visits.value[number], visits.variance[number], cells),
        step_s=np.diff(visits.middle_s[number]),
        block=_blocks(plan.pair[number]),
        start=np.log(np.where(start > 0, start, 1.0)),
        cells=cells,
    )


def _spread(cell: IntArray, value: FloatArray, variance: FloatArray, cells: int) -> FloatArray:
    """Return variance over value of every visit's cell; 1 where a cell gave nothing."""
    total, square = added(cell, value, cells), added(cell, variance, cells)
    known = (total > 0) & (square > 0)
    return np.divide(square, total, out=np.ones(cells), where=known)[cell]


def _blocks(pair: IntArray) -> IntArray:
    """Return the block of every visit: its pair, or several neighbouring pairs where there are very many."""
    every, block = np.unique(pair, return_inverse=True)
    each = len(every) // BLOCKS if len(every) > 2 * BLOCKS else 1
    return (block // each).astype(np.int64)


def _refitted(tables: Tables, series: Series, found: Fit) -> Tables:
    blocks = int(series.block.max(initial=-1)) + 1
    shape = (blocks, *tables.rates.shape)
    if blocks < 2:
        return tables
    rates = np.array([rates_without(series, found, block) for block in range(blocks)]).reshape(shape)
    seen: BoolArray = np.all(np.isfinite(rates), axis=-1)
    return Tables(tables.rates, tables.variances, tables.measured, np.nan_to_num(rates), seen)
