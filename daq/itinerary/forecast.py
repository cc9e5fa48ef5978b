"""Forecast: what an itinerary will bring, from counting and from the drift that is expected."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq import openings
from daq.description import Measurement
from daq.estimate.residual import kappa
from daq.itinerary.compose import Itinerary
from daq.itinerary.orders import FloatArray


@dataclass(frozen=True, slots=True)
class Forecast:
    """What a run is expected to bring.

    `kappa_se` counting and drift together, `kappa_counting_se` counting alone, `duty` live over total time,
    `q` the factor in time over an ideal night without moves and drift, `goal_s` when the goal is met (None:
    no goal).
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
    goal_s: float | None


def forecast(itinerary: Itinerary, measurement: Measurement) -> Forecast:
    """Return the forecast of an itinerary.

    Notes
    -----
    Counting error by full propagation at the expected rates; drift as a random walk of the log rate,
    V = q sum_i (t_{i+1} - t_i) (sum_{v<=i} c_v)^2 over the visits in order, c_v the weight of visit v.
    """
    counting_var = _counting_variance(itinerary, measurement)
    drift_var = drift_variance(itinerary, measurement.expect.drift_per_sqrt_hour)
    total_var = counting_var + drift_var
    live_s, total_s = float(itinerary.dwell_s.sum()), itinerary.total_s
    goal = measurement.estimate.goal_se
    return Forecast(
        visits=len(itinerary),
        laps=int(itinerary.lap.max()) + 1,
        pairs=itinerary.planned_pairs,
        live_s=live_s,
        total_s=total_s,
        duty=live_s / total_s,
        kappa_se=total_var**0.5,
        kappa_counting_se=counting_var**0.5,
        q=total_s / live_s * total_var / counting_var,
        goal_s=None if goal is None else total_s * total_var / goal**2,
    )


def drift_variance(itinerary: Itinerary, drift_per_sqrt_hour: float) -> float:
    """Return the variance of kappa that a random walk of the log rate brings [relative per sqrt(hour)]."""
    weight = _visit_weights(itinerary)
    step_s = np.diff(itinerary.start_s)
    return float(drift_per_sqrt_hour**2 / 3600.0 * (step_s * np.cumsum(weight)[:-1] ** 2).sum())


def _visit_weights(itinerary: Itinerary) -> FloatArray:
    """Return dkappa / dlog(rate) of each visit, shape (visits,)."""
    place, which = itinerary.position_index, itinerary.opening_index
    exposure = _exposure_s(itinerary)
    signs = np.array(
        [openings.sign(openings.name(int(mask)), itinerary.slits) for mask in itinerary.openings]
    )
    share = itinerary.dwell_s / exposure[place, which]
    rate = itinerary.rates_hz[place, which]
    return itinerary.weights[place] * signs[which] * rate * share / _delta(itinerary)


def _exposure_s(itinerary: Itinerary) -> FloatArray:
    """Return the planned live time of every opening at every position, shape (positions, openings) [s]."""
    exposure = np.zeros(itinerary.rates_hz.shape)
    np.add.at(exposure, (itinerary.position_index, itinerary.opening_index), itinerary.dwell_s)
    return exposure


def _delta(itinerary: Itinerary) -> float:
    """Return the weighted sum of the pairwise terms at the expected rates [1/s]."""
    index = {openings.name(int(mask)): column for column, mask in enumerate(itinerary.openings)}
    rate = itinerary.rates_hz
    delta = np.zeros(rate.shape[0])
    for pair, sign in itinerary.signs.items():
        first, second = tuple(pair)
        term = (
            rate[:, index[pair]]
            - rate[:, index[first]]
            - rate[:, index[second]]
            + rate[:, index[openings.NONE]]
        )
        delta += sign * term
    return float(itinerary.weights @ delta)


def _counting_variance(itinerary: Itinerary, measurement: Measurement) -> float:
    exposure = _exposure_s(itinerary)
    rate = itinerary.rates_hz
    variance = rate * (1.0 + rate * measurement.estimate.dead_time_s) / exposure
    named = [openings.name(int(mask)) for mask in itinerary.openings]
    _, se = kappa(
        {name: rate[:, column] for column, name in enumerate(named)},
        {name: variance[:, column] for column, name in enumerate(named)},
        itinerary.weights,
        signs=itinerary.signs,
        normalisation=measurement.estimate.normalisation,
    )
    return float(se) ** 2
