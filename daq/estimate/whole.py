"""The whole estimate: what page and report show of a run, from its visits or its sums."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from math import isfinite
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.bars import bars
from daq.estimate.blocks import jackknife
from daq.estimate.contrast import divisor_gradient, epsilon_and_delta
from daq.estimate.plan import Plan
from daq.estimate.residual import weighted_kappa
from daq.estimate.sums import Sums, sums_of
from daq.estimate.tables import Tables, kappa_of, measured, over, plan_contrast, tables_of
from daq.estimate.terms import PRINTABLE, Terms, terms_of
from daq.estimate.visits import Visits

Interval = tuple[float, float]

PLAIN = "plain contrast"


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """What a run says so far.

    Kappa, epsilon, delta and their bars rest on complete pairs. The tables by position, `rates_hz` (J, K) and
    the columns (J), rest on every stand used so far (NaN where nothing was counted), as do the numbers of
    visits and stands. `kappa_se` is the jackknife over pairs (None below two), `kappa_counting_se` what
    counting alone gives, `excess` their ratio; `interval_95` is the t bar, valid when read once, at the
    planned end; `whole_night_95` the band that holds at every look (None while infinite). `forecast_se` is
    expected at the planned end. `epsilon` and `delta` are weighted means [1/s]; `epsilon_se` is a jackknife
    too. `printable`: delta is large enough for kappa to be told, else epsilon is. `terms` holds every order.
    """

    kappa: float | None
    kappa_se: float | None
    kappa_counting_se: float | None
    interval_95: Interval | None
    whole_night_95: Interval | None
    excess: float | None
    excess_se: float | None
    forecast_se: float | None
    goal_se: float | None
    epsilon: float | None
    epsilon_se: float | None
    epsilon_counting_se: float | None
    delta: float | None
    delta_se: float | None
    printable: bool
    pairs: int
    planned_pairs: int
    visits: int
    stands_used: int
    stands_left_out: int
    normalisation: str
    rates_hz: FloatArray
    rates_se_hz: FloatArray
    epsilon_hz: FloatArray
    epsilon_se_hz: FloatArray
    delta_hz: FloatArray
    estimator: str = PLAIN
    why: str = ""
    dof: int | None = None
    terms: Terms | None = None

    def to_json(self) -> dict[str, Any]:
        """Return the estimate as plain lists and numbers, None for what is undefined."""
        return {field.name: _plain(getattr(self, field.name)) for field in fields(self)}


def estimate_visits(visits: Visits, plan: Plan) -> Estimate:
    """Return the estimate of a run from its visits, by the estimator that suits them."""
    return estimate_sums(sums_of(visits, plan), plan)


def estimate_sums(sums: Sums, plan: Plan) -> Estimate:
    """Return the estimate that sums over complete pairs give, by the plain contrast.

    Notes
    -----
    Positions without live time (every stand left out) carry no weight. The plain contrast of totals is best
    linear unbiased for complete mirrored pairs under a random walk of the source.
    """
    return _estimate(sums, tables_of(sums), plan)


def _estimate(sums: Sums, tables: Tables, plan: Plan) -> Estimate:
    return Estimate(
        **headline(sums, tables, plan),
        **_by_position(sums, plan),
        goal_se=plan.goal_se,
        planned_pairs=plan.planned_pairs,
        visits=sums.visits,
        stands_used=sums.stands_used,
        stands_left_out=sums.stands_left_out,
        normalisation=plan.normalisation,
        terms=terms_of(tables, plan),
    )


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


def headline(sums: Sums, tables: Tables, plan: Plan) -> Mapping[str, Any]:
    """Return kappa, epsilon, delta and their bars by name, None for what is undefined."""
    weights = np.where(tables.measured, plan.weights, 0.0)
    pairs = len(sums.value)
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
        numbers |= bars(kappa, counting, replicates, pairs, plan.planned_pairs)
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


def _by_position(sums: Sums, plan: Plan) -> Mapping[str, Any]:
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


def _plain(value: Any) -> Any:
    if isinstance(value, Terms):
        return _plain(value.to_json())
    if isinstance(value, dict):
        return {key: _plain(inner) for key, inner in value.items()}
    if isinstance(value, np.ndarray):
        return [_plain(inner) for inner in value.tolist()]
    if isinstance(value, (tuple, list)):
        return [_plain(inner) for inner in value]
    return None if isinstance(value, float) and not isfinite(value) else value
