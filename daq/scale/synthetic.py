"""Synthetic nights: counts drawn from the expected rates and the expected source of a description."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import stdtrit

from daq.description import parse
from daq.estimate import Plan
from daq.estimate.arrays import added
from daq.estimate.sums import Sums
from daq.estimate.whole import estimate_sums
from daq.itinerary import compose, plan_of

HOUR_S = 3600.0


@dataclass(frozen=True, slots=True)
class Planned:
    """A composed measurement: plan, expected rates (J, K), times, live times and trend by visit."""

    plan: Plan
    rates_hz: NDArray[np.float64]
    time_s: NDArray[np.float64]
    live_s: NDArray[np.float64]
    trend: NDArray[np.float64]
    walk_per_sqrt_h: float
    lines: tuple[tuple[float, float], ...]


def night(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, float]:
    """Return kappa of one made-up night, its bars, and whether they cover zero (dead time is left out)."""
    of = _planned(json.dumps(parameters, sort_keys=True))
    expected = of.rates_hz[of.plan.position, of.plan.opening] * of.live_s * _strength(of, generator)
    found = estimate_sums(_sums(of, generator.poisson(expected).astype(float)), of.plan)
    kappa, se = found.kappa, found.kappa_se
    assert kappa is not None and se is not None and found.dof is not None
    wide = found.whole_night_95
    return {
        "kappa": kappa,
        "kappa_se": se,
        "kappa_counting_se": found.kappa_counting_se or float("nan"),
        "excess": found.excess or float("nan"),
        "covered_95": float(abs(kappa) <= stdtrit(found.dof, 0.975) * se),
        "covered_whole_night_95": float(wide is None or wide[0] <= 0 <= wide[1]),
    }


@lru_cache(maxsize=8)
def _planned(text: str) -> Planned:
    parameters = json.loads(text)
    measurement = parse(parameters["measurement"], "measurement", "measurement")
    itinerary = compose(measurement, parse(parameters["rig"], "rig", "rig"))
    expect = measurement.expect
    middle_s = itinerary.start_s + itinerary.dwell_s / 2
    levels = np.asarray(expect.level_by_hour)
    return Planned(
        plan=plan_of(itinerary, measurement),
        rates_hz=itinerary.rates_hz,
        time_s=middle_s,
        live_s=itinerary.dwell_s,
        trend=np.interp(middle_s / HOUR_S, np.arange(len(levels)), levels),
        walk_per_sqrt_h=expect.drift_per_sqrt_hour,
        lines=tuple((line.period_s, line.amplitude) for line in expect.lines),
    )


def _strength(of: Planned, generator: np.random.Generator) -> NDArray[np.float64]:
    """Return the strength of the source by visit: trend, random walk, ripples of any phase."""
    order = np.argsort(of.time_s, kind="stable")
    steps = np.sqrt(np.diff(of.time_s[order], prepend=of.time_s[order[0]]) / HOUR_S)
    walk = np.empty(len(steps))
    walk[order] = np.cumsum(of.walk_per_sqrt_h * steps * generator.standard_normal(len(steps)))
    found = of.trend * np.exp(walk)
    for period_s, amplitude in of.lines:
        found = found * (1 + amplitude * np.sin(2 * np.pi * (of.time_s / period_s + generator.random())))
    return np.asarray(found)


def _sums(of: Planned, counts: NDArray[np.float64]) -> Sums:
    plan = of.plan
    shape = (plan.planned_pairs, len(plan.positions_mm), len(plan.openings))
    inside = plan.pair >= 0
    cell = (plan.pair * shape[1] + plan.position) * shape[2] + plan.opening
    value, live = (
        added(cell[inside], column[inside], int(np.prod(shape))).reshape(shape)
        for column in (counts, of.live_s)
    )
    return Sums(value, live, value)
