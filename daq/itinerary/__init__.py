"""Itinerary: the ordered visits of a run and what they will bring."""

from daq.itinerary.compose import Itinerary, compose, pinned, plan_of
from daq.itinerary.decide import MIRRORED
from daq.itinerary.forecast import Forecast, drift_variance, forecast, walk
from daq.itinerary.known import expected_rates, opening_order
from daq.itinerary.orders import blocked, cyclic, random_walk_cost, shuffled, zigzag
from daq.itinerary.pilot import wander_of_counts, wander_of_structure
from daq.itinerary.wander import Wander, wander_variance

__all__ = [
    "MIRRORED",
    "Forecast",
    "Itinerary",
    "Wander",
    "blocked",
    "compose",
    "cyclic",
    "drift_variance",
    "expected_rates",
    "forecast",
    "opening_order",
    "pinned",
    "plan_of",
    "random_walk_cost",
    "shuffled",
    "walk",
    "wander_of_counts",
    "wander_of_structure",
    "wander_variance",
    "zigzag",
]
