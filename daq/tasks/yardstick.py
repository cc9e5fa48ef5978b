"""Yardstick: what a defect may be, in figures, from the user's own goal and pattern."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.description import Measurement, Rig
from daq.estimate.arrays import FloatArray
from daq.estimate.sensitivity import log_gradient
from daq.itinerary import Itinerary, compose, forecast, plan_of

SHARE = 0.3  # of the goal: what one systematic may take


@dataclass(frozen=True, slots=True)
class Yardstick:
    """The allowance of one systematic, and how kappa answers to what goes wrong.

    Attributes
    ----------
    goal_se
        Standard error of kappa that is aimed at: the description's, else the forecast.
    allowed
        Shift of kappa that one systematic may make.
    load
        Opening (bit mask) -> change of kappa for its relative rate error, the same at every position.
    rate_error
        Rms relative error of the openings' rates, independent of one another, that makes `allowed`.
    per_dead_time
        Change of kappa for a dead time left over [1/s].
    per_memory
        Change of kappa for the share of the visit before that a visit also sees.
    position_mm, opening
        Where the mask's fullest opening is brightest, and that opening.
    brightest_hz
        What is expected there.
    """

    goal_se: float
    allowed: float
    load: dict[int, float]
    rate_error: float
    per_dead_time: float
    per_memory: float
    position_mm: float
    opening: int
    brightest_hz: float


def yardstick(measurement: Measurement, rig: Rig) -> Yardstick:
    """Return the yardstick of a measurement on a rig.

    Notes
    -----
    With dkappa/dln(rate) of opening S at position j, g_S in all positions of S moves kappa by its sum over j;
    independent g of rms g move it by g times the root of the summed squares.
    """
    itinerary = compose(measurement, rig)
    plan = plan_of(itinerary, measurement)
    rates: FloatArray = itinerary.rates_hz
    gradient = log_gradient(rates, np.ones(len(rates), bool), plan)
    assert gradient is not None  # a plan without a divisor is refused when it is composed
    goal = measurement.estimate.goal_se or forecast(itinerary, measurement).kappa_se
    by_opening = gradient.sum(axis=0)
    size = float(np.sqrt(np.sum(by_opening**2)))
    fullest = int(np.argmax(itinerary.openings))
    place = int(np.argmax(rates[:, fullest]))
    return Yardstick(
        goal_se=goal,
        allowed=SHARE * goal,
        load=dict(zip(itinerary.openings.tolist(), by_opening.tolist(), strict=True)),
        rate_error=SHARE * goal / size,
        per_dead_time=float(-np.sum(gradient * rates)),
        per_memory=float(np.sum(gradient * (_before(itinerary) / rates - 1))),
        position_mm=float(itinerary.positions_mm[place]),
        opening=int(itinerary.openings[fullest]),
        brightest_hz=float(rates[place, fullest]),
    )


def _before(itinerary: Itinerary) -> FloatArray:
    """Return the mean rate of the visits before those at each position and opening (J, K) [1/s]."""
    place = itinerary.position_index
    column = itinerary.opening_index
    rates: FloatArray = itinerary.rates_hz
    at, before = (place[1:], column[1:]), rates[place[:-1], column[:-1]]
    total, visits = np.zeros_like(rates), np.zeros_like(rates)
    np.add.at(total, at, before)
    np.add.at(visits, at, 1.0)
    return np.asarray(np.where(visits > 0, total / np.maximum(visits, 1.0), rates))
