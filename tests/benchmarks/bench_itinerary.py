"""How long planning takes, as ratios to sorting a million floats in the same process; memory; growth.

Run: python -m tests.benchmarks.bench_itinerary
"""

from __future__ import annotations

import tracemalloc
from collections.abc import Callable
from functools import partial
from time import perf_counter

import numpy as np

from daq.description import Measurement
from daq.itinerary import compose, forecast
from tests.daq.itinerary.rigs import rig_of, without_dwell
from tests.examples import lantern, lantern_rig

MANY = {"positions__number": 1250, "itinerary__laps": 100}  # a million visits
GIB = 2**30


def best_s(function: Callable[[], object], times: int = 3) -> float:
    """Return the shortest of several timings [s]."""
    timings = []
    for _ in range(times):
        start = perf_counter()
        function()
        timings.append(perf_counter() - start)
    return min(timings)


def planned(measurement: Measurement) -> None:
    """Compose and forecast."""
    forecast(compose(measurement, lantern_rig()), measurement)


def peak_bytes(function: Callable[[], object]) -> int:
    """Return the most memory that was held at once."""
    tracemalloc.start()
    function()
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    return peak


def main() -> None:
    """Print each figure with its ratio to the yardstick."""
    shuffled = np.random.default_rng(0).random(1_000_000)
    yardstick = best_s(lambda: np.sort(shuffled))
    searched = {"itinerary__order": "searched", "expect__drift_per_sqrt_hour": 0.03}
    plans = {
        "10 h as described": lantern(),
        "10 h, order searched": lantern(**searched),
        "10 h, order searched, openings up to three times": lantern(**searched, itinerary__repeats=3),
        "10 h, dwell chosen, order searched": without_dwell(**searched),
        "250 000 visits": lantern(**MANY | {"itinerary__laps": 24}),
        "500 000 visits": lantern(**MANY | {"itinerary__laps": 50}),
        "1 000 000 visits": lantern(**MANY),
    }
    figures = {"yardstick: sort 1e6 floats": yardstick}
    figures |= {name: best_s(partial(planned, plan)) for name, plan in plans.items()}
    for slits in (4, 5):
        plan = lantern(**searched)
        figures[f"{2**slits} openings, order searched"] = best_s(partial(compose, plan, rig_of(slits)), 1)
    for name, seconds in figures.items():
        print(f"{seconds:10.4f} s  {seconds / yardstick:10.3f} x   {name}")
    each = figures["1 000 000 visits"] / (2 * figures["500 000 visits"])
    print(f"twice the visits take {2 * each:.2f} times as long")
    held = peak_bytes(partial(planned, plans["1 000 000 visits"]))
    print(f"a million visits hold {held / GIB:.2f} GiB at most")


if __name__ == "__main__":
    main()
