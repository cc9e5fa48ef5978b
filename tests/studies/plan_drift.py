"""Planned drift variance against simulated paths, gates averaged over their width, order by order."""

from __future__ import annotations

from collections.abc import Callable
from math import sqrt
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.itinerary import Wander, compose, drift_variance, walk
from daq.itinerary.compose import Itinerary, pattern_of_itinerary
from tests.examples import lantern, lantern_rig
from tests.studies.bench import generator_of
from tests.studies.rows import Each, rows

PATHS = 4000
POINTS = 5  # of a gate
AT_ONCE = 100
ORDERS = ("zigzag", "searched", "cyclic", "random")
Steps = Callable[[FloatArray, int, np.random.Generator], FloatArray]


def study(nights: int = PATHS, each: Each = rows) -> dict[str, Any]:
    """Return simulated over planned variance of kappa for every order and every wander."""
    wanted = {f"{order}, {name}": [order, name, nights] for order in ORDERS for name in WANDERS}
    return {
        "about": "Lantern, 11 positions, 6 laps, best dwell; simulated over planned variance",
        "rows": each("plan_drift:row", wanted),
    }


def row(order: str, name: str, nights: int) -> dict[str, Any]:
    """Return the ratio of one order under one wander."""
    wander, paths = WANDERS[name]
    itinerary = compose(
        lantern(positions__number=11, itinerary__laps=6, itinerary__order=order, itinerary__dwell="best"),
        lantern_rig(),
    )
    generator = generator_of(f"plan drift {order}", name)
    kappas = np.concatenate(
        [
            _kappas(itinerary, paths(_times_s(itinerary), min(AT_ONCE, nights - first), generator))
            for first in range(0, nights, AT_ONCE)
        ]
    )
    planned = drift_variance(itinerary, wander)
    ratio = float(np.mean(kappas**2)) / planned
    return {
        "nights": nights,
        "planned_se": planned**0.5,
        "ratio": ratio,
        "ratio_se": ratio * float(np.std(kappas**2) / np.mean(kappas**2)) / sqrt(nights),
        "meets": {"ratio": abs(ratio - 1) <= 0.1},
    }


def _times_s(itinerary: Itinerary) -> FloatArray:
    inside = (np.arange(POINTS) + 0.5) / POINTS
    return np.asarray((itinerary.start_s[:, None] + itinerary.dwell_s[:, None] * inside).ravel())


def _kappas(itinerary: Itinerary, log_level: FloatArray) -> FloatArray:
    """Return kappa of nights without counting noise."""
    pattern = pattern_of_itinerary(itinerary, "pairwise")
    cell = itinerary.position_index * 8 + itinerary.opening_index
    share = itinerary.dwell_s / np.bincount(cell, itinerary.dwell_s)[cell]
    level = np.exp(log_level).reshape(len(log_level), len(itinerary), POINTS).mean(axis=-1)
    return np.array(
        [
            pattern.kappa_of(itinerary.rates_hz * np.bincount(cell, share * one).reshape(-1, 8))
            for one in level
        ]
    )


def _walk(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    step = np.sqrt(walk(0.03).walk_per_s * np.diff(time_s, prepend=time_s[0]))
    return np.cumsum(step * generator.standard_normal((nights, len(time_s))), axis=1)


def _relaxing(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    keep = np.exp(-np.diff(time_s, prepend=time_s[0]) / RELAX_S)
    fresh = SD * generator.standard_normal((nights, len(time_s)))
    level = np.empty((nights, len(time_s)))
    state = fresh[:, 0]
    for at, kept in enumerate(keep):
        state = kept * state + np.sqrt(1 - kept**2) * fresh[:, at]
        level[:, at] = state
    return level


def _line(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    phase = generator.uniform(0, 2 * np.pi, (nights, 1))
    return np.asarray(SD * np.sqrt(2) * np.sin(2 * np.pi * time_s / LINE_S + phase))


def _jumps(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    """Jump thirty times an hour, 1 % rms: the structure function is that of a random walk."""
    chance = 30 * np.diff(time_s, prepend=time_s[0]) / 3600
    jumps = generator.random((nights, len(time_s))) < chance
    return np.cumsum(jumps * 0.01 * generator.standard_normal(jumps.shape), axis=1)


SD, RELAX_S, LINE_S = 0.005, 30.0, 300.0
WANDERS: dict[str, tuple[Wander, Steps]] = {
    "random walk": (walk(0.03), _walk),
    "relaxing": (Wander(relaxing=((SD**2, RELAX_S),)), _relaxing),
    "line": (Wander(lines=((SD * 2**0.5, LINE_S),)), _line),
    "jumps": (walk(0.01 * 30**0.5), _jumps),
}
