"""Forecast: what an itinerary will bring, from counting and from the drift that is expected."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from math import ceil, inf

import numpy as np

from daq.description import Measurement
from daq.estimate.counting import seen_rate_hz, true_rate_hz
from daq.itinerary.compose import Itinerary, pattern_of_itinerary
from daq.itinerary.cost import Pattern, exposures_s, pattern_of
from daq.itinerary.orders import BoolArray, FloatArray
from daq.itinerary.pilot import HOUR_S, wander_of
from daq.itinerary.wander import Wander, line_variance, wander_variance

POINTS = 60  # of the error bar against time
SMALL_LOSS = 1e-6  # share of the counts that the step of a numerical slope loses


@dataclass(frozen=True, slots=True)
class Forecast:
    """What a run is expected to bring.

    `kappa_se` everything that scatters from pair to pair together; `kappa_counting_se` counting alone; `duty`
    live over total time; `q` the factor in time over an ideal night of equal dwell without moves and drift;
    `budget` standard errors of kappa by what brings them (of these counting, drift and lines make `kappa_se`;
    background is a part of counting; trend and dead time shift kappa as a whole; monitor is what normalising
    to it would add); `hours`, `se` the error bar against time; `goal_s` when the goal is met (None: no goal,
    or out of reach for any length).
    """

    visits: int
    laps: int
    pairs: int
    live_s: float
    total_s: float
    duty: float
    kappa_se: float
    kappa_counting_se: float
    q: float
    budget: Mapping[str, float]
    hours: tuple[float, ...]
    se: tuple[float, ...]
    goal_se: float | None
    goal_s: float | None


def forecast(itinerary: Itinerary, measurement: Measurement) -> Forecast:
    """Return the forecast of an itinerary: its complete pairs, what is left over adds time only.

    Notes
    -----
    Counting error by full propagation at the expected rates; drift by V = -sum_{v<w} c_v c_w D(t_w - t_v)
    over the visits in order, c_v the weight of visit v, D the structure function of the log rate.
    """
    budget = _budget(itinerary, measurement)
    parts = {name: budget[name] ** 2 for name in ("counting", "drift", "lines")}
    variance, pairs = sum(parts.values()), itinerary.planned_pairs
    live_s, total_s = float(itinerary.dwell_s.sum()), itinerary.total_s
    goal = measurement.estimate.goal_se
    count = np.unique(np.linspace(1, pairs, min(pairs, POINTS)).round())
    return Forecast(
        visits=len(itinerary),
        laps=int(itinerary.lap.max()) + 1,
        pairs=pairs,
        live_s=live_s,
        total_s=total_s,
        duty=live_s / total_s,
        kappa_se=variance**0.5,
        kappa_counting_se=budget["counting"],
        q=total_s * variance / _ideal(itinerary, measurement),
        budget=budget,
        hours=tuple((count * total_s / pairs / HOUR_S).tolist()),
        se=tuple(np.sqrt(variance * pairs / count).tolist()),
        goal_se=goal,
        goal_s=None if goal is None else _goal_s(variance, _systematic_var(budget), pairs, total_s, goal),
    )


def drift_variance(itinerary: Itinerary, wander: Wander, normalisation: str = "pairwise") -> float:
    """Return the variance of kappa that the wander of the source brings."""
    chosen = itinerary.pair < itinerary.planned_pairs
    weight = _weights(itinerary, pattern_of_itinerary(itinerary, normalisation), chosen)
    return wander_variance(weight, itinerary.start_s[chosen], itinerary.dwell_s[chosen], wander)


def walk(per_sqrt_hour: float) -> Wander:
    """Return a random walk of the log rate, relative per square root of an hour."""
    return Wander(walk_per_s=per_sqrt_hour**2 / HOUR_S)


def mean_level(level_by_hour: tuple[float, ...], total_s: float) -> float:
    """Return the mean strength of the source over a run; straight between hours, the last one stays."""
    hours = np.linspace(0, total_s / HOUR_S, 1001)
    return float(np.interp(hours, np.arange(len(level_by_hour)), level_by_hour).mean())


def _budget(itinerary: Itinerary, measurement: Measurement) -> dict[str, float]:
    """Return standard errors of kappa by what brings them."""
    pattern = pattern_of_itinerary(itinerary, measurement.estimate.normalisation)
    chosen = itinerary.pair < itinerary.planned_pairs
    start_s, dwell_s = itinerary.start_s[chosen], itinerary.dwell_s[chosen]
    weight = _weights(itinerary, pattern, chosen)
    wander, _ = wander_of(measurement)
    counting, background = _counting(itinerary, measurement, pattern, chosen)
    variances = {
        "counting": counting,
        "background": background,
        "drift": wander_variance(weight, start_s, dwell_s, replace(wander, lines=())),
        "lines": line_variance(weight, start_s, dwell_s, wander.lines),
        "trend": _trend_bias(weight, start_s + dwell_s / 2, measurement) ** 2,
        "dead time": _dead_time_bias(pattern, measurement) ** 2,
    }
    monitor_hz = measurement.expect.monitor_rate_hz
    if monitor_hz is not None:
        variances["monitor"] = float(weight**2 @ (1 / (monitor_hz * dwell_s)))
    return {name: variance**0.5 for name, variance in variances.items()}


def _counting(
    itinerary: Itinerary, measurement: Measurement, pattern: Pattern, chosen: BoolArray
) -> tuple[float, float]:
    """Return the variance of kappa from counting, and the part of it that the background makes."""
    exposure_s = _exposure_s(itinerary, chosen)
    estimate, expect = measurement.estimate, measurement.expect
    level = mean_level(expect.level_by_hour, itinerary.total_s)
    each = pattern.counting_variances(exposure_s, estimate.dead_time_s) * estimate.fano / level
    rates_hz = itinerary.rates_hz
    dark = np.divide(expect.background_rate_hz, rates_hz, out=np.zeros_like(rates_hz), where=rates_hz > 0)
    return float(each.sum()), float((each * dark).sum())


def _trend_bias(weight: FloatArray, middle_s: FloatArray, measurement: Measurement) -> float:
    """Return how far the expected trend of the source moves kappa."""
    levels = measurement.expect.level_by_hour
    return float(weight @ np.log(np.interp(middle_s / HOUR_S, np.arange(len(levels)), levels)))


def _systematic_var(budget: Mapping[str, float]) -> float:
    """Return the variance of what shifts kappa as a whole, however long the run."""
    return budget["dead time"] ** 2 + budget["trend"] ** 2


def _dead_time_bias(pattern: Pattern, measurement: Measurement) -> float:
    """Return how far kappa goes, to first order, when the dead time is wrong by its standard uncertainty."""
    estimate = measurement.estimate
    if not estimate.dead_time_u_s:
        return 0.0
    kind, step_s = estimate.dead_time_kind, SMALL_LOSS / float(pattern.rates_hz.max())
    seen_hz = seen_rate_hz(pattern.rates_hz, estimate.dead_time_s, kind)
    wrong_hz = np.asarray(true_rate_hz(seen_hz, estimate.dead_time_s + step_s, kind))
    slope = (pattern.kappa_of(wrong_hz) - pattern.kappa_of(pattern.rates_hz)) / step_s
    return abs(slope) * estimate.dead_time_u_s


def _goal_s(variance: float, systematic_var: float, pairs: int, total_s: float, goal: float) -> float | None:
    """Return when a goal is met, at the end of a pair; None where more time would not do."""
    left = goal**2 - systematic_var
    needed = pairs * variance / left if left > 0 else inf
    return ceil(needed - 1e-9) * total_s / pairs if needed < inf else None


def _ideal(itinerary: Itinerary, measurement: Measurement) -> float:
    """Return time x variance of a night of equal dwell without moves and drift."""
    estimate = measurement.estimate
    equal = pattern_of(
        itinerary.rates_hz,
        itinerary.openings,
        itinerary.slits,
        estimate.normalisation,
        estimate.counting == "counts",
    )
    seconds = np.ones(itinerary.rates_hz.shape)
    level = mean_level(measurement.expect.level_by_hour, itinerary.total_s)
    variance = float(equal.counting_variances(seconds, estimate.dead_time_s).sum())
    return variance * float(seconds.sum()) * estimate.fano / level


def _weights(itinerary: Itinerary, pattern: Pattern, chosen: BoolArray) -> FloatArray:
    return pattern.visit_weights(
        itinerary.position_index[chosen], itinerary.opening_index[chosen], itinerary.dwell_s[chosen]
    )


def _exposure_s(itinerary: Itinerary, chosen: BoolArray) -> FloatArray:
    return exposures_s(
        itinerary.position_index[chosen],
        itinerary.opening_index[chosen],
        itinerary.dwell_s[chosen],
        itinerary.rates_hz.shape,
    )
