"""A finished run of three slits that several tests read."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from daq.estimate.dataset import estimate_run
from daq.itinerary.compose import Itinerary
from daq.records import Quality, Reading
from daq.storage.reader import open_visits
from daq.storage.run import create_run

POSITIONS_MM = np.array([-2.0, -0.7, 0.1, 0.9, 2.3])
LAPS, SLITS, OPENINGS = 8, 3, 8
WEIGHTS = np.array([0.5, 1.0, 1.0, 1.0, 0.25])
SIGNS = {"AB": np.array([1.0, 1, 1, -1, 1]), "AC": np.array([1.0, -1, 1, 1, 1]), "BC": np.ones(5)}


def triple_itinerary() -> Itinerary:
    number = np.arange(LAPS * len(POSITIONS_MM) * OPENINGS)
    stand, lap = number // OPENINGS, number // (OPENINGS * len(POSITIONS_MM))
    place = stand % len(POSITIONS_MM)
    place = np.where(lap % 2 == 0, place, len(POSITIONS_MM) - 1 - place)
    return Itinerary(
        opening=np.where(stand % 2 == 0, number % OPENINGS, OPENINGS - 1 - number % OPENINGS),
        position_mm=POSITIONS_MM[place],
        start_s=np.float64(2.5) * number,
        dwell_s=np.full(len(number), 2.0),
        stand=stand,
        lap=lap,
        pair=lap // 2,
        forward=lap // 2 % 2 == 0,
        openings=np.arange(OPENINGS),
        positions_mm=POSITIONS_MM,
        slits=SLITS,
        weights=WEIGHTS,
        signs=SIGNS,
        rates_hz=np.full((len(POSITIONS_MM), OPENINGS), 20_000.0),
        order="zigzag",
        seed=1,
        total_s=1000.0,
    )


def triple_readings(plan: Itinerary) -> list[Reading]:
    """Return the readings of three whole pairs, a dark visit among them, and a few of the fourth."""
    draw = np.random.default_rng(3)
    fields = {letter: 100.0 * np.exp(0.4j * i) for i, letter in enumerate("ABC")}
    readings = []
    for visit in range(3 * 2 * len(POSITIONS_MM) * OPENINGS + 11):
        mask = int(plan.opening[visit])
        field = sum(fields[letter] for bit, letter in enumerate("ABC") if mask >> bit & 1)
        rate = abs(field) ** 2 + 800.0
        count = float(draw.poisson(2.0 * rate / (1 + rate * 40e-9)))
        readings.append(_reading(plan, visit, count, 1 + 1e-9 * visit))
    dark = replace(readings[0], visit=-1, quality=Quality.DARK, reason=4, values=(93.0,))
    return [*readings[:24], dark, *readings[24:]]


def _reading(plan: Itinerary, visit: int, count: float, stretch: float) -> Reading:
    opened = 1_000_000_000 + 2_500_000_000 * visit
    return Reading(
        visit=visit,
        attempt=1,
        opening=int(plan.opening[visit]),
        position_mm=float(plan.position_mm[visit]),
        dwell_s=2.0,
        gate_open_ns=opened,
        gate_close_ns=opened + 2_000_000_000,
        utc_ns=1_796_144_400_000_000_000 + opened,
        live_s=2.0 * stretch,
        values=(count,),
    )


@pytest.fixture(scope="session")
def triple(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the folder of a finished run of three slits."""
    folder, plan = tmp_path_factory.mktemp("triple") / "20261201T170000Z-triple", triple_itinerary()
    meta = {
        "run": folder.name,
        "name": "triple",
        "title": "Lantern bench, three slits, a short night",
        "kind": "rehearsal",
        "slits": SLITS,
        "openings": list(range(OPENINGS)),
        "axes": [],
        "sensors": {},
        "channels": 1,
        "counting": "counts",
        "normalisation": "pairwise",
        "dead_time_s": 40e-9,
        "dead_time_kind": "non-paralysable",
        "planned_pairs": LAPS // 2,
        "started_utc": "2026-12-01T17:00:00Z",
        "notes": {"organisation": "Lantern bench"},
        "truth_kappa": None,
    }
    with create_run(
        folder, texts={"rig.toml": b"schema = 1\n"}, itinerary=plan, meta=meta, chunk=64
    ) as archive:
        for one in triple_readings(plan):
            archive.commit(one)
        archive.finish({"results": estimate_run(open_visits(folder)).to_json()})
    return folder
