"""How long the estimate takes, as ratios to sorting a million floats in the same process.

Run: python -m tests.benchmarks.bench_estimate [--million]
"""

from __future__ import annotations

import resource
import sys
from collections.abc import Callable
from dataclasses import replace
from functools import partial
from time import process_time
from typing import Any

import numpy as np
import xarray as xr

from daq.estimate import Judge, Plan, Rules, Running, estimate_run, judged_again
from daq.estimate.account import account_of
from daq.estimate.dataset import rows_of_dataset
from daq.estimate.irregular import series_of
from daq.estimate.joint import fit
from daq.estimate.sensitivity import taken_visits
from daq.estimate.visits import visits_of
from tests.daq.estimate.nights import SLOT_S, dataset, plan, rates_hz, readings, shuffled

LANTERN = (41, 38)  # positions and laps of the reference night: 12 464 visits
MILLION = (41, 3050)  # 1 000 400 visits


def best_s(function: Callable[[], object], times: int = 5) -> float:
    """Return the shortest of several timings [s of CPU: a busy machine does not count]."""
    timings = []
    for _ in range(times):
        start = process_time()
        function()
        timings.append(process_time() - start)
    return min(timings)


def main() -> None:
    """Print each figure with its ratio to the yardstick."""
    shuffled_floats = np.random.default_rng(0).random(1_000_000)
    yardstick = best_s(lambda: np.sort(shuffled_floats))
    figures = {"yardstick: sort 1e6 floats": yardstick, **of_lantern(), **of_the_joint_fit()}
    if "--million" in sys.argv[1:]:
        figures |= of_a_million()
    for name, seconds in figures.items():
        print(f"{seconds * 1e6:14.1f} us   {seconds / yardstick:10.5f} x   {name}")
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20
    print(f"most memory of this process: {peak:.2f} GiB")


def of_lantern() -> dict[str, float]:
    """Return the figures of the reference night."""
    of = plan(*LANTERN)
    night = readings(of, np.random.default_rng(1))
    archive, full = dataset(of, night), Running(of)
    for reading in night:
        full.add(reading)
    expected = rates_hz(of.positions_mm)

    def add_all() -> None:
        running = Running(of)
        for reading in night:
            running.add(reading)

    def judge_all() -> None:
        judge = Judge(of, Rules(), expected)
        for reading in night:
            judge.judge(reading)

    def after_a_stand() -> None:
        for reading in night[-8:]:
            full.add(reading)
        full.estimate()

    name = f"{len(night)} visits"
    return {
        f"estimate_run, {name}, jackknife over {of.planned_pairs} pairs": best_s(
            lambda: estimate_run(archive)
        ),
        f"account_of, {name}": best_s(lambda: account_of(archive)),
        f"judged_again, {name}": best_s(lambda: judged_again(archive), 2),
        "Running.add, one visit": best_s(add_all) / len(night),
        "Judge.judge, one visit": best_s(judge_all, 2) / len(night),
        "Running.add of a stand and estimate(), pairs worked out again": best_s(after_a_stand),
        "Running.history() of a whole night, once": best_s(lambda: _fresh(full).history(), 1),
    }


def of_the_joint_fit() -> dict[str, float]:
    """Return the figures of irregular nights: random order, a tenth of the visits lost."""
    figures = {}
    for per_sqrt_hour in (0.01, 0.03, 0.3):
        of, archive = irregular_night(LANTERN, per_sqrt_hour)
        visits = visits_of(rows_of_dataset(archive), of)
        taken = taken_visits(visits, of, visits.good)
        assert taken is not None
        series = series_of(visits, of, taken)
        name = f"joint fit, {len(series.value)} visits, walk of {100 * per_sqrt_hour:g} %/sqrt(h)"
        figures[name] = best_s(partial(fit, series), 3)
        if per_sqrt_hour == 0.03:
            name = "estimate_run by the joint fit, jackknife refitted"
            figures[name] = best_s(partial(estimate_run, archive), 2)
    return figures


def of_a_million() -> dict[str, float]:
    """Return the figures of a million visits, mirrored and irregular."""
    irregular = irregular_night(MILLION, 0.01)[1]
    mirrored = night_of(plan(*MILLION, dead_time_s=0.0), np.ones(8 * MILLION[0] * MILLION[1]))
    return {
        "estimate_run, 1 000 400 visits, mirrored": best_s(lambda: estimate_run(mirrored), 1),
        "estimate_run, 1 000 400 visits, joint fit": best_s(lambda: estimate_run(irregular), 1),
    }


def irregular_night(size: tuple[int, int], per_sqrt_hour: float) -> tuple[Plan, xr.Dataset]:
    """Return a night in random order with a tenth of the visits lost, as an archive."""
    generator = np.random.default_rng(2)
    of = shuffled(plan(*size, dead_time_s=0.0), generator)
    steps = generator.normal(0, per_sqrt_hour * np.sqrt(SLOT_S / 3600), len(of.stand))
    archive = night_of(of, np.exp(np.cumsum(steps)))
    archive["quality"].values[generator.random(len(of.stand)) < 0.1] = 4  # off its target
    return of, archive


def night_of(of: Plan, level: np.ndarray) -> xr.Dataset:
    """Return the archive of a whole night, drawn at once."""
    first = dataset(of, readings(replace(of, **_cut(of)), np.random.default_rng(3)))
    number = np.arange(len(of.stand))
    mean = rates_hz(of.positions_mm)[of.position, of.opening] * 2.2 * level
    opened = np.round(number * SLOT_S * 1e9).astype(np.int64)
    columns = {
        "visit": number, "attempt": np.ones_like(number), "opening": of.openings[of.opening],
        "position_mm": of.positions_mm[of.position], "live_s": np.full(len(number), 2.2),
        "quality": np.zeros_like(number), "gate_open_ns": opened, "gate_close_ns": opened + 2_200_000_000,
        "utc_ns": opened, "dwell_s": np.full(len(number), 2.2), "stand": of.stand, "pair": of.pair,
    }  # fmt: skip
    values = np.random.default_rng(4).poisson(mean)[:, None]
    tables = {"values": values, "values_var": np.full(values.shape, np.nan)}
    return xr.Dataset(
        {name: ("row", column) for name, column in columns.items()}
        | {name: (("row", "channel"), table) for name, table in tables.items()},
        attrs=first.attrs,
    )


def _cut(of: Plan) -> dict[str, Any]:
    return {name: getattr(of, name)[:8] for name in ("stand", "pair", "position", "opening")}


def _fresh(running: Running) -> Running:
    running._past.clear()
    return running


if __name__ == "__main__":
    main()
