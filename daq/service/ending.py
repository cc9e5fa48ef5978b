"""Ending: which end a run has come to, looked for at the edge of every pair, and the record of it."""

from __future__ import annotations

import getpass
from dataclasses import asdict
from typing import Any

from daq.description import Measurement
from daq.estimate import Running
from daq.estimate.stopping import (
    BROKEN,
    BY_HAND,
    END_TIME,
    FUTILE_FROM_PAIR,
    FUTILITY,
    GOAL,
    Stopping,
    due,
    stop,
)
from daq.itinerary import Itinerary, forecast
from daq.service.night import Night

REASONS = {
    GOAL: "the goal of the error bar is met",
    FUTILITY: "stopped for futility: it would hardly have found a kappa other than zero",
    END_TIME: "the time it was booked for is over",
}


def due_now(running: Running, stopping: Stopping, pair: int) -> str:
    """Return which kind of end is due when so many pairs are through, the last stand still being counted."""
    if pair < FUTILE_FROM_PAIR or not (stopping.goal_se or stopping.futility):
        return ""
    pairs = running.estimate().pairs
    return due(stopping, running.after(pairs), pair) if pairs > 1 else ""


def how_it_ended(night: Night) -> dict[str, Any]:
    """Return the record of how a run ended, without the reason in words."""
    asked, pairs = night.asked, night.running.estimate().pairs
    kind = asked.kind or BY_HAND
    who = (asked.who or getpass.getuser()) if kind in (BY_HAND, BROKEN) else "the plan"
    found = asdict(stop(kind, "", who, pairs, not night.blinding.hides))
    return {name: value for name, value in found.items() if name != "reason"}


def stopping_of(itinerary: Itinerary, measurement: Measurement) -> Stopping:
    """Return the ends that a measurement allows besides its plan, with the excess that is planned."""
    ends = measurement.stop
    if not ends.goal:
        return Stopping(futility=ends.futility)
    expected = forecast(itinerary, measurement)
    excess = max(1.0, expected.kappa_se / expected.budget["counting"])
    return Stopping(measurement.estimate.goal_se, ends.futility, excess)
