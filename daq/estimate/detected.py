"""Detected: what the channels of a visit say of the light that reached the detector, and how well."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray
from daq.estimate.counting import true_counts, within_range
from daq.estimate.plan import Heralded, Plan
from daq.estimate.rows import DETECTOR, Rows


@dataclass(frozen=True, slots=True)
class Detected:
    """By visit: corrected counts (power: energy) and their variance, the monitor's, and which can be used.

    Where `fine` is false the numbers are zero; a monitor that gave nothing is NaN.
    """

    value: FloatArray
    variance: FloatArray
    monitor: FloatArray
    monitor_variance: FloatArray
    fine: BoolArray


def detected(rows: Rows, plan: Plan) -> Detected:
    """Return what the visits detected, corrected one by one before anything is summed.

    Notes
    -----
    Cannot be used: a value that is not finite, no live time, a rate at which the counter saturates, and a
    value below zero that has no variance of its own (a count).
    """
    live = np.where(np.isfinite(rows.live) & (rows.live > 0), rows.live, np.nan)
    if plan.counting == "power":
        value, variance = rows.values[:, DETECTOR] * live, rows.variances[:, DETECTOR] * live**2
    elif plan.heralded is not None:
        value, variance = _coincidences(rows, live, plan, plan.heralded)
    else:
        value, variance = _counts(rows.values[:, DETECTOR], rows.variances[:, DETECTOR], live, plan)
    fine: BoolArray = np.isfinite(value)
    return Detected(np.where(fine, value, 0.0), np.where(fine, variance, 0.0), *_monitor(rows, plan), fine)


def _counts(
    values: FloatArray, variances: FloatArray, live: FloatArray, plan: Plan
) -> tuple[FloatArray, FloatArray]:
    """Return counts without dead-time losses and their variance; NaN where there is no such number."""
    rate = values / live
    fine = within_range(rate, plan.dead_time_s, plan.dead_time_kind) & (np.isfinite(variances) | (rate >= 0))
    value, variance = np.full(len(live), np.nan), np.full(len(live), np.nan)
    value[fine], variance[fine] = true_counts(
        values[fine], live[fine], variances[fine], plan.dead_time_s, plan.dead_time_kind, plan.fano
    )
    return value, variance


def _coincidences(rows: Rows, live: FloatArray, plan: Plan, pairs: Heralded) -> tuple[FloatArray, FloatArray]:
    """Return coincidences without accidental ones, and their variance.

    Notes
    -----
    Accidentals are the product of both singles rates, the window and the live time. Given both singles their
    number is Poisson about that product, so taking it away adds nothing to the variance of the coincidences.
    Each channel's dead time loses coincidences in the same share as singles.

    References
    ----------
    .. [1] "Radiation Detection and Measurement", 4th ed., ch. 17 (chance coincidences), from memory.
    """
    none = np.full(len(live), np.nan)
    raw = tuple(rows.values[:, channel] for channel in (pairs.signal, pairs.idler))
    first, second = (_counts(channel, none, live, plan)[0] for channel in raw)
    loss = np.prod([_ratio(true, seen) for true, seen in zip((first, second), raw, strict=True)], axis=0)
    seen = np.where(rows.values[:, DETECTOR] >= 0, rows.values[:, DETECTOR], np.nan)
    return seen * loss - pairs.window_s / live * first * second, seen * loss**2 * plan.fano


def _ratio(true: FloatArray, seen: FloatArray) -> FloatArray:
    return np.divide(true, seen, out=np.ones(len(seen)), where=seen > 0)


def _monitor(rows: Rows, plan: Plan) -> tuple[FloatArray, FloatArray]:
    """Return the monitor's value per live second and its variance; NaN without a monitor or its light."""
    if plan.monitor is None:
        nothing = np.full(len(rows.live), np.nan)
        return nothing, nothing
    value, variance = rows.values[:, plan.monitor], rows.variances[:, plan.monitor]
    if plan.counting == "counts":
        live = np.where(rows.live > 0, rows.live, np.nan)
        variance = np.where(np.isnan(variance), value, variance) / live**2
        value = value / live
    lit = np.isfinite(value) & (value > 0)
    return np.where(lit, value, np.nan), np.where(lit, np.nan_to_num(variance), np.nan)
