"""Headline: kappa, epsilon, delta and their bars, and the patterns by position, as numbers by name."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.bars import bars
from daq.estimate.blocks import jackknife
from daq.estimate.contrast import divisor_gradient, epsilon_and_delta
from daq.estimate.plan import Plan
from daq.estimate.residual import weighted_kappa
from daq.estimate.sums import Sums
from daq.estimate.tables import Tables, kappa_of, measured, over, plan_contrast
from daq.estimate.terms import PRINTABLE

_HEADLINE = (
    *(
        "kappa",
        "kappa_se",
        "kappa_counting_se",
        "interval_95",
        "whole_night_95",
        "excess",
        "excess_se",
        "dof",
    ),
    *("forecast_se", "epsilon", "epsilon_se", "epsilon_counting_se", "delta", "delta_se"),
)


def headline(tables: Tables, pairs: int, plan: Plan) -> Mapping[str, Any]:
    """Return kappa, epsilon, delta and their bars by name, None for what is undefined."""
    weights = np.where(tables.measured, plan.weights, 0.0)
    numbers: dict[str, Any] = dict.fromkeys(_HEADLINE) | {"printable": False, "pairs": pairs}
    if not weights.sum() > 0:
        return numbers
    what, signs = plan_contrast(plan)
    numbers |= _weighted_sums(tables, weights, plan)
    if numbers["delta"] > 0:
        kappa, counting = weighted_kappa(
            tables.rates, tables.variances, weights, what, signs, plan.normalisation
        )
        numbers |= {"kappa": kappa, "kappa_counting_se": counting}
        replicates = kappa_of(tables.without, tables.without_measured, plan)
        numbers |= bars(kappa, counting, replicates, pairs, plan.planned_pairs, plan.hard_end)
    return numbers


def _weighted_sums(tables: Tables, weights: FloatArray, plan: Plan) -> Mapping[str, Any]:
    what, signs = plan_contrast(plan)
    rates, variances = tables.rates, tables.variances
    epsilon, delta = epsilon_and_delta(rates, what, plan.normalisation, signs)
    shares = weights / weights.sum()
    delta_gradient = divisor_gradient(rates, shares, what, plan.normalisation, signs)
    delta_se = _spread(delta_gradient, variances)
    return {
        "epsilon": float(shares @ epsilon),
        "epsilon_se": _scatter(tables, plan),
        "epsilon_counting_se": _spread(shares[:, None] * what.residual, variances),
        "delta": float(shares @ delta),
        "delta_se": delta_se,
        "printable": bool(shares @ delta >= PRINTABLE * delta_se),
    }


def _scatter(tables: Tables, plan: Plan) -> float | None:
    """Return the jackknife standard error of epsilon; None below two blocks."""
    weights = np.where(tables.without_measured, plan.weights, 0.0)
    total = weights.sum(axis=-1)
    if tables.blocks < 2 or not np.all(total > 0):
        return None
    what, _ = plan_contrast(plan)
    return jackknife(np.sum(weights * (tables.without @ what.residual), axis=-1) / total)[0]


def by_position(sums: Sums, plan: Plan) -> Mapping[str, Any]:
    """Return rates, signed sum and divisor by position over every stand used so far."""
    parts = [sums] if sums.going_on is None else [sums, sums.going_on]
    value, live, variance = (
        sum(getattr(part, name).sum(axis=0) for part in parts) for name in ("value", "live", "variance")
    )
    rates, variances = over(value, live, np.nan), over(variance, live**2, np.nan)
    seen = measured(live)
    what, signs = plan_contrast(plan)
    filled = np.where(seen[:, None], rates, 0.0)
    epsilon, delta = epsilon_and_delta(filled, what, plan.normalisation, signs)
    return {
        "rates_hz": rates,
        "rates_se_hz": np.sqrt(variances),
        "epsilon_hz": np.where(seen, epsilon, np.nan),
        "epsilon_se_hz": np.sqrt(variances @ what.residual**2),
        "delta_hz": np.where(seen, delta, np.nan),
    }


def _spread(gradient: FloatArray, variances: FloatArray) -> float:
    return float(np.sqrt(np.sum(gradient**2 * variances)))
