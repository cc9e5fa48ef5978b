"""Itinerary: the ordered visits of a run and what they will bring."""

from daq.itinerary.compose import Itinerary, compose, expected_rates, opening_order, plan_of
from daq.itinerary.forecast import Forecast, drift_variance, forecast
from daq.itinerary.orders import blocked, random_walk_cost, zigzag

__all__ = [
    "Forecast",
    "Itinerary",
    "blocked",
    "compose",
    "drift_variance",
    "expected_rates",
    "forecast",
    "opening_order",
    "plan_of",
    "random_walk_cost",
    "zigzag",
]
