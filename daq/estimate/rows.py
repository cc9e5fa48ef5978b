"""Rows: planned visits as they came home, and which of them can be corrected."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray, IntArray
from daq.estimate.counting import within_range
from daq.estimate.plan import Plan


@dataclass(frozen=True, slots=True)
class Rows:
    """Planned visits as they came home, by row: numbers, try, quality, and what the detector gave.

    `value` counts (or power), `live` seconds, `variance` of the value (NaN: Poisson).
    """

    visit: IntArray
    attempt: IntArray
    quality: IntArray
    value: FloatArray
    live: FloatArray
    variance: FloatArray


def countable(rows: Rows, plan: Plan) -> BoolArray:
    """Return which rows can be corrected: finite, not negative where Poisson, live, below saturation."""
    live = np.isfinite(rows.live) & (rows.live > 0)
    rate = np.divide(rows.value, rows.live, out=np.full(len(rows.live), np.nan), where=live)
    poisson = np.isnan(rows.variance)
    fine: BoolArray = within_range(rate, plan.dead_time_s, plan.dead_time_kind) & (~poisson | (rate >= 0))
    return fine
