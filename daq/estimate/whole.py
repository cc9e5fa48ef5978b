"""The whole estimate: what page and report show of a run, from its sums."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from math import inf, isfinite, sqrt
from typing import Any

import numpy as np
from scipy.special import stdtrit

from daq.estimate.arrays import FloatArray
from daq.estimate.blocks import jackknife
from daq.estimate.contrast import Contrast, contrast, divisor_gradient, epsilon_and_delta, planned_signs
from daq.estimate.peeking import anytime_multiplier
from daq.estimate.plan import Plan
from daq.estimate.residual import weighted_kappa
from daq.estimate.sums import Sums

PRINTABLE = 6.0  # kappa is printed where delta lies this many standard errors above zero
EXCESS_KNOWN = 8  # pairs from which the excess is steady enough to forecast with

Interval = tuple[float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """What a run says so far.

    Kappa, epsilon, delta and their bars rest on complete pairs. The tables by position, `rates_hz` (J, K) and
    the columns (J), rest on every stand used so far (NaN where nothing was counted), as do the numbers of
    visits and stands. `kappa_se` is the jackknife over pairs (None below two), `kappa_counting_se` what
    counting alone gives, `excess` their ratio; `interval_95` is the t bar, valid when read once, at the
    planned end; `whole_night_95` the band that holds at every look (None while infinite). `forecast_se` is
    expected at the planned end. `epsilon` and `delta` are weighted means [1/s].
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

    def to_json(self) -> dict[str, Any]:
        """Return the estimate as plain lists and numbers, None for what is undefined."""
        return {field.name: _plain(getattr(self, field.name)) for field in fields(self)}


def estimate_sums(sums: Sums, plan: Plan) -> Estimate:
    """Return the estimate that sums over complete pairs give.

    Notes
    -----
    Positions without live time (every stand left out) carry no weight. The headline is the plain contrast of
    totals, best linear unbiased for complete mirrored pairs under a random walk of the source; its standard
    error assumes independent pairs.
    """
    what = contrast(tuple(map(int, plan.openings)), plan.slits)
    signs = planned_signs(plan.signs, what)
    return Estimate(
        **_headline(sums, plan, what, signs),
        **_by_position(sums, plan, what, signs),
        goal_se=plan.goal_se,
        pairs=len(sums.value),
        planned_pairs=plan.planned_pairs,
        visits=sums.visits,
        stands_used=sums.stands_used,
        stands_left_out=sums.stands_left_out,
        normalisation=plan.normalisation,
    )


def leave_one_out(sums: Sums, plan: Plan) -> FloatArray:
    """Return kappa of the totals without each pair in turn; NaN where nothing is left to divide by."""
    what = contrast(tuple(map(int, plan.openings)), plan.slits)
    live = sums.live.sum(axis=0) - sums.live
    rates = _over(sums.value.sum(axis=0) - sums.value, live)
    weights = np.where(_measured(live), plan.weights, 0.0)
    epsilon, delta = epsilon_and_delta(rates, what, plan.normalisation, planned_signs(plan.signs, what))
    return _over(np.sum(weights * epsilon, axis=-1), np.sum(weights * delta, axis=-1), np.nan)


def _headline(sums: Sums, plan: Plan, what: Contrast, signs: FloatArray) -> Mapping[str, Any]:
    live = sums.live.sum(axis=0)
    weights = np.where(_measured(live), plan.weights, 0.0)
    numbers: dict[str, Any] = dict.fromkeys(_HEADLINE) | {"printable": False}
    if not weights.sum() > 0:
        return numbers
    rates, variances = _over(sums.value.sum(axis=0), live), _over(sums.variance.sum(axis=0), live**2)
    numbers |= _weighted_sums(rates, variances, weights, plan, what, signs)
    if numbers["delta"] > 0:
        kappa, counting = weighted_kappa(rates, variances, weights, what, signs, plan.normalisation)
        numbers |= {"kappa": kappa, "kappa_counting_se": counting}
        numbers |= _bars(kappa, counting, leave_one_out(sums, plan), plan)
    return numbers


_HEADLINE = (
    *("kappa", "kappa_se", "kappa_counting_se", "interval_95", "whole_night_95", "excess", "excess_se"),
    *("forecast_se", "epsilon", "epsilon_se", "delta", "delta_se"),
)


def _weighted_sums(
    rates: FloatArray,
    variances: FloatArray,
    weights: FloatArray,
    plan: Plan,
    what: Contrast,
    signs: FloatArray,
) -> Mapping[str, Any]:
    epsilon, delta = epsilon_and_delta(rates, what, plan.normalisation, signs)
    shares = weights / weights.sum()
    epsilon_gradient = shares[:, None] * what.residual
    delta_gradient = divisor_gradient(rates, shares, what, plan.normalisation, signs)
    delta_se = _spread(delta_gradient, variances)
    return {
        "epsilon": float(shares @ epsilon),
        "epsilon_se": _spread(epsilon_gradient, variances),
        "delta": float(shares @ delta),
        "delta_se": delta_se,
        "printable": bool(shares @ delta >= PRINTABLE * delta_se),
    }


def _bars(kappa: float, counting: float, replicates: FloatArray, plan: Plan) -> Mapping[str, Any]:
    """Return the bars that the scatter of the pairs gives; nothing below two pairs."""
    pairs = len(replicates)
    shrink = sqrt(pairs / plan.planned_pairs) if plan.planned_pairs else 1.0
    if pairs < 2 or not np.isfinite(replicates).all():
        return {"forecast_se": counting * shrink}
    se, freedom = jackknife(replicates)
    excess = se / counting if counting > 0 else None
    half = float(stdtrit(freedom, 0.975)) * se
    outer = anytime_multiplier(pairs, plan.planned_pairs) * se if se > 0 else inf
    return {
        "kappa_se": se,
        "interval_95": (kappa - half, kappa + half),
        "whole_night_95": (kappa - outer, kappa + outer) if isfinite(outer) else None,
        "excess": excess,
        "excess_se": None if excess is None else excess / sqrt(2 * freedom),
        "forecast_se": shrink * (se if pairs >= EXCESS_KNOWN else counting),
    }


def _by_position(sums: Sums, plan: Plan, what: Contrast, signs: FloatArray) -> Mapping[str, Any]:
    """Return rates, signed sum and divisor by position over every stand used so far."""
    parts = [sums] if sums.going_on is None else [sums, sums.going_on]
    value, live, variance = (
        sum(getattr(part, name).sum(axis=0) for part in parts) for name in ("value", "live", "variance")
    )
    rates, variances = _over(value, live, np.nan), _over(variance, live**2, np.nan)
    filled = np.where(_measured(live)[:, None], rates, 0.0)
    epsilon, delta = epsilon_and_delta(filled, what, plan.normalisation, signs)
    seen = _measured(live)
    return {
        "rates_hz": rates,
        "rates_se_hz": np.sqrt(variances),
        "epsilon_hz": np.where(seen, epsilon, np.nan),
        "epsilon_se_hz": np.sqrt(variances @ what.residual**2),
        "delta_hz": np.where(seen, delta, np.nan),
    }


def _measured(live: FloatArray) -> np.ndarray[Any, np.dtype[np.bool_]]:
    measured: np.ndarray[Any, np.dtype[np.bool_]] = np.all(live > 0, axis=-1)
    return measured


def _over(value: FloatArray, under: FloatArray, otherwise: float = 0.0) -> FloatArray:
    return np.divide(value, under, out=np.full(np.shape(value), otherwise), where=np.asarray(under) > 0)


def _spread(gradient: FloatArray, variances: FloatArray) -> float:
    return float(np.sqrt(np.sum(gradient**2 * variances)))


def _plain(value: Any) -> Any:
    if isinstance(value, np.ndarray):
        return [_plain(inner) for inner in value.tolist()]
    if isinstance(value, (tuple, list)):
        return [_plain(inner) for inner in value]
    return None if isinstance(value, float) and not isfinite(value) else value
