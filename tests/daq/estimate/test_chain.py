"""From readings through the archive to the estimate: every count model, with the rules of the night."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import daq
from daq.estimate import Judge, Rules, Running, judged_again, readings_of_dataset
from daq.estimate.account import account_of
from daq.itinerary import Itinerary, compose, plan_of
from daq.records import Quality, Reading
from daq.storage.run import create_run
from tests.daq.estimate.test_running import agree
from tests.examples import lantern, lantern_rig

SMALL = {"positions__number": 3, "itinerary__laps": 8, "itinerary__dwell_s": 2.0}
NO_DEAD_TIME = {"estimate__dead_time_s": 0.0, "estimate__dead_time_u_s": 0.0}
PAIRS = {"signal": 1, "idler": 2, "window_s": 1e-6}

MODELS: dict[str, tuple[int, dict[str, Any]]] = {
    "poisson": (1, {}),
    "fano": (1, {"estimate__fano": 1.5}),
    "power": (1, {"estimate__counting": "power", **NO_DEAD_TIME}),
    "monitor": (2, {"estimate__monitor_channel": 1}),
    "heralded": (3, {"estimate__heralded": PAIRS}),
}


def night(name: str) -> tuple[Itinerary, Any, dict[str, Any]]:
    """Return itinerary, measurement and record of a small night."""
    channels, changes = MODELS[name]
    measurement = lantern(**SMALL, **changes)
    itinerary, settings = compose(measurement, lantern_rig()), measurement.estimate
    return itinerary, measurement, {
        "run": name, "name": name, "title": "", "kind": "run", "clock": "virtual",
        "slits": 3, "openings": itinerary.openings.tolist(), "positions_mm": itinerary.positions_mm.tolist(),
        "axes": ["mask", "detector"], "sensors": {}, "channels": channels, "slices": 4,
        "counting": settings.counting, "fano": settings.fano, "monitor_channel": settings.monitor_channel,
        "heralded": None if settings.heralded is None else settings.heralded.model_dump(),
        "quality": measurement.quality.model_dump(), "expected_hz": itinerary.rates_hz.tolist(),
        "tolerance_mm": {"mask": 0.005, "detector": 0.02},
        "targets_mm": {name: {"mask": 0.0} for name in ("none", "A", "B", "AB", "C", "AC", "BC", "ABC")},
        "weights": itinerary.weights.tolist(), "signs": {k: v.tolist() for k, v in itinerary.signs.items()},
        "normalisation": "pairwise", "dead_time_s": settings.dead_time_s,
        "dead_time_kind": settings.dead_time_kind, "planned_pairs": itinerary.planned_pairs,
        "visits_planned": len(itinerary), "order": "zigzag", "seed": 1, "goal_se": settings.goal_se,
    }  # fmt: skip


def readings(name: str, itinerary: Itinerary) -> list[Reading]:
    """Return what such a night brings home, one visit off its target."""
    generator = np.random.default_rng(1)
    rates = itinerary.rates_hz[itinerary.position_index, itinerary.opening_index]
    found = []
    for number, rate in enumerate(rates.tolist()):
        values, variances = _values(name, rate, generator)
        opened = round(float(itinerary.start_s[number]) * 1e9)
        slices = [[int(value) // 4 for value in values] for _ in range(4)]
        found.append(
            Reading(
                visit=number, attempt=1, opening=int(itinerary.opening[number]),
                position_mm=float(itinerary.position_mm[number]), dwell_s=2.0, gate_open_ns=opened,
                gate_close_ns=opened + 2_000_000_000, utc_ns=opened, live_s=2.0, values=values,
                values_var=variances, repeats=10 if name == "power" else 1, slices=tuple(map(tuple, slices)),
                encoder_mm={"mask": (0.0, 0.01 if number == 77 else 0.0),
                            "detector": (float(itinerary.position_mm[number]),) * 2},
                quality=Quality.OFF_TARGET | Quality.MOVED if number == 77 else Quality.GOOD,
            )
        )  # fmt: skip
    return found


def _values(name: str, rate: float, generator: np.random.Generator) -> tuple[tuple[float, ...], Any]:
    count = float(generator.poisson(rate * 2.0))
    if name == "power":
        taken = rate * 1e-15 + generator.normal(0, 1e-13, 10)
        return (float(taken.mean()),), (float(taken.var(ddof=1)) / 10,)
    if name == "monitor":
        return (count, float(generator.poisson(1e6))), None
    if name == "heralded":
        return (float(round(count / 50 + 800)), 2e4 + count % 100, 2e4 + count % 77), None
    return (count,), None


@pytest.mark.parametrize("name", MODELS)
def test_what_is_estimated_while_it_runs_is_what_the_archive_gives(name: str, tmp_path: Path) -> None:
    itinerary, measurement, meta = night(name)
    plan = plan_of(itinerary, measurement)
    rules = Rules(**measurement.quality.model_dump())
    judge, running = Judge(plan, rules, itinerary.rates_hz), Running(plan)
    with create_run(tmp_path / name, texts={}, itinerary=itinerary, meta=meta) as archive:
        for reading in readings(name, itinerary):
            judged = judge.judge(reading)
            archive.commit(judged)
            running.add(judged)

    visits = daq.open_visits(tmp_path / name)

    assert agree(running.estimate().to_json(), daq.estimate_run(visits).to_json())
    assert np.array_equal(judged_again(visits), visits["quality"].values)
    assert np.count_nonzero(visits["quality"].values) == 1
    assert account_of(visits).left_out == {"off_target": 1, "moved": 1}


@pytest.mark.parametrize("name", MODELS)
def test_a_run_that_goes_on_has_the_same_estimate(name: str, tmp_path: Path) -> None:
    itinerary, measurement, meta = night(name)
    plan, rows = plan_of(itinerary, measurement), readings(name, itinerary)
    with create_run(tmp_path / name, texts={}, itinerary=itinerary, meta=meta) as archive:
        for reading in rows[:150]:
            archive.commit(reading)

    resumed, whole = Running(plan), Running(plan)
    for reading in [*readings_of_dataset(daq.open_visits(tmp_path / name)), *rows[150:]]:
        resumed.add(reading)
    for reading in rows:
        whole.add(reading)

    assert agree(resumed.estimate().to_json(), whole.estimate().to_json())


def test_slices_come_back_as_they_were(tmp_path: Path) -> None:
    itinerary, _, meta = night("poisson")
    rows = readings("poisson", itinerary)[:3]
    rows[1] = replace(rows[1], slices=None)
    with create_run(tmp_path / "sliced", texts={}, itinerary=itinerary, meta=meta) as archive:
        for reading in rows:
            archive.commit(reading)

    found = list(readings_of_dataset(daq.open_visits(tmp_path / "sliced")))

    assert [row.slices for row in found] == [row.slices for row in rows]
