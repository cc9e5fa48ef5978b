"""Tables: the rates that an estimate rests on, and the same rates without each block in turn."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray
from daq.estimate.contrast import Contrast, contrast, epsilon_and_delta, planned_signs
from daq.estimate.plan import Plan
from daq.estimate.sums import Sums


@dataclass(frozen=True, slots=True)
class Tables:
    """Rates [1/s] and their counting variances by position and opening (J, K), and replicates (B, J, K).

    `measured` (J) and `without_measured` (B, J): positions at which every opening has live time. A replicate
    is the table with one block left out; there are none below two blocks.
    """

    rates: FloatArray
    variances: FloatArray
    measured: BoolArray
    without: FloatArray
    without_measured: BoolArray

    @property
    def blocks(self) -> int:
        """How many blocks the error bar is made from."""
        return len(self.without)


def tables_of(sums: Sums) -> Tables:
    """Return the tables that sums give, each pair a block."""
    live = sums.live.sum(axis=0)
    return Tables(
        over(sums.value.sum(axis=0), live),
        over(sums.variance.sum(axis=0), live**2),
        measured(live),
        *_without_each(sums),
    )


def kappa_of(rates: FloatArray, seen: BoolArray, plan: Plan) -> FloatArray:
    """Return kappa (...) of tables of rates (..., J, K); NaN where nothing is left to divide by."""
    what, signs = plan_contrast(plan)
    weights = np.where(seen, plan.weights, 0.0)
    epsilon, delta = epsilon_and_delta(rates, what, plan.normalisation, signs)
    return over(np.sum(weights * epsilon, axis=-1), np.sum(weights * delta, axis=-1), np.nan)


def plan_contrast(plan: Plan) -> tuple[Contrast, FloatArray]:
    """Return the contrast of a plan's openings and its planned signs (J, P)."""
    what = contrast(tuple(map(int, plan.openings)), plan.slits)
    return what, planned_signs(plan.signs, what)


def measured(live: FloatArray) -> BoolArray:
    """Return at which positions (..., J) every opening has live time (..., J, K)."""
    every: BoolArray = np.all(live > 0, axis=-1)
    return every


def over(value: FloatArray, under: FloatArray, otherwise: float = 0.0) -> FloatArray:
    """Return a quotient, and a stand-in where the divisor is not above zero."""
    return np.divide(value, under, out=np.full(np.shape(value), otherwise), where=np.asarray(under) > 0)


def _without_each(sums: Sums) -> tuple[FloatArray, BoolArray]:
    if len(sums.value) < 2:
        return np.zeros((0, *sums.value.shape[1:])), np.zeros((0, sums.value.shape[1]), bool)
    live = sums.live.sum(axis=0) - sums.live
    return over(sums.value.sum(axis=0) - sums.value, live), measured(live)
