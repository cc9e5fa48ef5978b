"""How long the estimate takes, as ratios to sorting a million floats in the same process.

Run: python -m tests.benchmarks.bench_estimate
"""

from __future__ import annotations

from collections.abc import Callable
from time import perf_counter

import numpy as np

from daq.estimate import Running, estimate_run
from tests.daq.estimate.nights import dataset, plan, readings

LANTERN = (41, 38)  # positions and laps of the reference night: 12 464 visits


def best_s(function: Callable[[], object], times: int = 5) -> float:
    """Return the shortest of several timings [s]."""
    timings = []
    for _ in range(times):
        start = perf_counter()
        function()
        timings.append(perf_counter() - start)
    return min(timings)


def main() -> None:
    """Print each figure with its ratio to the yardstick."""
    of = plan(*LANTERN)
    night = readings(of, np.random.default_rng(1))
    archive = dataset(of, night)
    shuffled = np.random.default_rng(0).random(1_000_000)
    yardstick = best_s(lambda: np.sort(shuffled))
    full = Running(of)

    def add_all() -> None:
        running = Running(of)
        for reading in night:
            running.add(reading)

    def after_a_stand() -> None:
        for reading in night[-8:]:
            full.add(reading)
        full.estimate()

    for reading in night:
        full.add(reading)
    figures = {
        "yardstick: sort 1e6 floats": yardstick,
        f"estimate_run, {len(night)} visits, jackknife over {of.planned_pairs} pairs": best_s(
            lambda: estimate_run(archive)
        ),
        "Running.add, one visit": best_s(add_all) / len(night),
        "Running.add of a stand and estimate()": best_s(after_a_stand),
        "Running.history() of a whole night, once": best_s(lambda: _fresh(full).history(), 1),
    }
    for name, seconds in figures.items():
        print(f"{seconds * 1e6:12.1f} us   {seconds / yardstick:10.5f} x   {name}")


def _fresh(running: Running) -> Running:
    running._past.clear()
    return running


if __name__ == "__main__":
    main()
