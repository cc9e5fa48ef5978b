"""The forecast against forty nights of nineteen pairs: the error bar that came out over the one foretold.

What is expected of a source is what its owner can say beforehand: its trend by the hour, the random walk or
the lines that it is known for; of flicker, twenty minutes of counts.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from daq.description import Measurement
from daq.estimate import estimate_sums
from daq.estimate.sums import Sums
from daq.itinerary import Itinerary, compose, forecast, plan_of
from daq.itinerary.orders import FloatArray
from tests.examples import lantern, lantern_rig
from tests.studies.bench import generator_of
from tests.studies.plan_ripple import cells
from tests.studies.rows import Each, rows
from tests.studies.sources import SOURCES

NIGHTS = 40
HOURS = np.arange(11)
PILOTS, PILOT_S, PILOT_HZ = 10, 1200, 1e5
POINTS = 3  # of a gate
Wishes = dict[str, Any]


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return the ratio for every source."""
    return {
        "about": "Lantern, 41 positions, 19 pairs; root mean square jackknife over forecast",
        "rows": each("plan_nights:row", {source: [source, nights] for source in SOURCES}),
    }


def row(source: str, nights: int) -> dict[str, Any]:
    """Return the ratio for one source."""
    generator = generator_of("plan nights", source)
    told = [_expected(source, generator) for _ in range(PILOTS if source == "flicker" else 1)]
    itinerary = compose(told[0], lantern_rig())
    foretold = [forecast(itinerary, measurement) for measurement in told]
    found = _came_out(itinerary, told[0], source, nights, generator)
    came_out = float(np.sqrt(np.mean(np.square(found))))
    ratios = [came_out / one.kappa_se for one in foretold]
    low, high = (0.8, 1.25) if source == "flicker" else (0.9, 1.1)
    return {
        "nights": nights,
        "foretold": foretold[0].kappa_se,
        "drift share": foretold[0].budget["drift"] / foretold[0].kappa_se,
        "ratio": float(np.median(ratios)),
        "ratio_se": came_out / foretold[0].kappa_se * _relative_se(found),
        "least": min(ratios),
        "most": max(ratios),
        "meets": {"ratio": low <= min(ratios) and max(ratios) <= high},
    }


def _came_out(
    itinerary: Itinerary, measurement: Measurement, source: str, nights: int, generator: np.random.Generator
) -> list[float]:
    """Return the jackknife standard error of every night; the source is averaged over each gate."""
    plan = plan_of(itinerary, measurement)
    inside = (np.arange(POINTS) + 0.5) / POINTS
    times_s = (itinerary.start_s[:, None] + itinerary.dwell_s[:, None] * inside).ravel()
    steady = itinerary.rates_hz[plan.position, plan.opening] * itinerary.dwell_s
    live = cells(itinerary.dwell_s, plan)
    found = []
    for strength in SOURCES[source](times_s, nights, generator):
        level = strength.reshape(-1, POINTS).mean(axis=1)
        value = cells(generator.poisson(steady * level).astype(float), plan)
        estimate = estimate_sums(Sums(value, live, value), plan)
        assert estimate.kappa_se is not None
        found.append(estimate.kappa_se)
    return found


def _relative_se(found: list[float]) -> float:
    """Return the relative standard error of a root mean square."""
    squares = np.square(found)
    return float(squares.std(ddof=1) / squares.mean() / 2 / len(found) ** 0.5)


def _expected(source: str, generator: np.random.Generator) -> Measurement:
    falling = (1 - 0.03 * HOURS).tolist()
    share = HOURS / 10
    known: dict[str, Wishes] = {
        "linear": {"level_by_hour": falling},
        "quadratic": {"level_by_hour": (1 - 0.1 * share - 0.2 * share**2).tolist()},
        "exponential": {"level_by_hour": (1 - 0.2 * -np.expm1(-HOURS)).tolist()},
        "random walk": {"drift_per_sqrt_hour": 0.03},
        "sine 20 min": _line(1200.0),
        "sine 60 min": _line(3600.0),
        "sine 180 min": _line(10800.0),
        "steps": {"drift_per_sqrt_hour": 0.02},
        "mix": {
            "level_by_hour": falling,
            "drift_per_sqrt_hour": (0.015**2 + 0.01**2) ** 0.5,
            **_line(1800.0),
        },
    }
    quiet = {"drift_per_sqrt_hour": 0.0, "level_by_hour": [1.0]}
    wishes = {f"expect__{key}": value for key, value in (quiet | known.get(source, {})).items()}
    if source == "flicker":
        wishes["pilot"] = {"counts": _pilot(source, generator)}
    return lantern(estimate__dead_time_s=0.0, estimate__dead_time_u_s=0.0, **wishes)


def _line(period_s: float) -> Wishes:
    return {"lines": [{"period_s": period_s, "amplitude": 0.02}]}


def _pilot(source: str, generator: np.random.Generator) -> list[int]:
    """Return the counts of twenty minutes of a source, a second each."""
    level: FloatArray = SOURCES[source](np.arange(PILOT_S, dtype=float), 1, generator)[0]
    counts: list[int] = generator.poisson(PILOT_HZ * level).tolist()
    return counts
