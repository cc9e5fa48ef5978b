"""A small invented run for the tests of the archive: two slits, three positions, two channels."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.itinerary.compose import Itinerary
from daq.records import Quality, Reading
from daq.storage.disk import Disk
from daq.storage.run import Archive, create_run

OPENINGS = (0, 1, 2, 3)
EVENT_CHUNK = 256
POSITIONS_MM = (-1.5, 0.0, 1.5)
MEANS = (1_000, 50_000, 52_000, 150_000)  # counts of a visit by opening
META: Mapping[str, Any] = {
    "run": "20261201T170000Z-small",
    "name": "small",
    "title": "Lantern bench, small",
    "kind": "rehearsal",
    "slits": 2,
    "openings": list(OPENINGS),
    "axes": ["mask", "detector"],
    "sensors": {"room": "degC"},
    "channels": 2,
    "counting": "counts",
    "weights": [1.0, 1.0, 1.0],
    "signs": {"AB": [1.0, 1.0, -1.0]},
}
TEXTS = {"description.toml": b"schema = 1\n", "dialects/counter.toml": b"# \xc3\xa4\r\n"}


@cache
def planned_visits(laps: int = 4) -> Itinerary:
    """Return the itinerary of `laps` laps, twelve visits each."""
    number = np.arange(12 * laps)
    stand, lap = number // 4, number // 12
    out_and_back = np.where(lap % 2 == 0, stand % 3, 2 - stand % 3)
    return Itinerary(
        opening=number % 4,
        position_mm=np.array(POSITIONS_MM)[out_and_back],
        start_s=np.float64(2.5) * number,
        dwell_s=np.full(len(number), 2.0),
        stand=stand,
        lap=lap,
        pair=lap // 2,
        forward=lap // 2 % 2 == 0,
        openings=np.array(OPENINGS),
        positions_mm=np.array(POSITIONS_MM),
        slits=2,
        weights=np.ones(3),
        signs={"AB": np.array([1.0, 1.0, -1.0])},
        rates_hz=np.full((3, 4), 25_000.0),
        order="zigzag",
        seed=1,
        total_s=30.0 * laps,
    )


def reading(visit: int, attempt: int = 1) -> Reading:
    """Return what visit `visit` brings home: the same numbers every time it is asked."""
    draw = np.random.default_rng([7, visit + 1, attempt])
    plan = planned_visits(200)
    opened = 1_000_000_000 + 2_500_000_000 * visit
    return Reading(
        visit=visit,
        attempt=attempt,
        opening=int(plan.opening[visit]),
        position_mm=float(plan.position_mm[visit]),
        dwell_s=2.0,
        gate_open_ns=opened,
        gate_close_ns=opened + 2_000_000_123,
        utc_ns=1_796_144_400_000_000_000 + opened,
        live_s=2.0 + 1e-9 * float(draw.integers(1000)),
        values=tuple(float(count) for count in draw.poisson(MEANS[int(plan.opening[visit])], 2)),
        encoder_mm={
            "mask": (2.0 + float(draw.normal(0, 1e-3)), 2.0),
            "detector": (-0.0, float(draw.normal())),
        },
        sensors={"room": (21.3 + float(draw.normal()), "degC", opened - 5)} if visit % 3 else {},
        quality=Quality.OWN_LIVE_TIME if visit % 5 == 0 else Quality.GOOD,
        reason=0,
    )


def ticks_of(visit: int) -> NDArray[np.uint64]:
    """Return the event times of a visit [ns since its gate opened]: none, few, or several chunks."""
    draw = np.random.default_rng([11, visit])
    number = (0, 3, 100, EVENT_CHUNK, 700)[visit % 5]
    return np.sort(draw.integers(0, 2_000_000_000, number)).astype(np.uint64)


def listed(visit: int) -> Reading:
    """Return what a visit brings home in list mode."""
    return replace(reading(visit), events=ticks_of(visit).astype("<u8").tobytes())


def started(
    folder: Path,
    chunk: int = 4096,
    laps: int = 4,
    disk: Disk | None = None,
    tick_s: float | None = None,
    event_chunk: int = EVENT_CHUNK,
) -> Archive:
    """Return the archive of a new run in `folder`; in list mode with a tick."""
    meta = {**META, "list_mode": {"tick_s": tick_s, "chunk": event_chunk}} if tick_s else META
    return create_run(folder, texts=TEXTS, itinerary=planned_visits(laps), meta=meta, chunk=chunk, disk=disk)


def expected(readings: Sequence[Reading]) -> dict[str, NDArray[Any]]:
    """Return what the measured columns must hold after these readings, worked out column by column."""
    nan, plain = float("nan"), ("visit", "attempt", "opening", "gate_open_ns", "gate_close_ns", "utc_ns")
    real = ("position_mm", "dwell_s", "live_s")
    whole = {name: np.array([getattr(r, name) for r in readings], np.int64) for name in (*plain, "repeats")}
    return {
        **whole,
        **{name: np.array([getattr(r, name) for r in readings], np.float64) for name in real},
        "quality": np.array([int(r.quality) for r in readings], np.int64),
        "reason": np.array([r.reason for r in readings], np.int64),
        "values": np.array([r.values for r in readings], np.float64).astype(np.int64).reshape(-1, 2),
        "values_var": np.array([r.values_var or (nan, nan) for r in readings], np.float64).reshape(-1, 2),
        **{
            f"encoder_{axis}_{edge}_mm": np.array([r.encoder_mm[axis][at] for r in readings], np.float64)
            for axis in ("mask", "detector")
            for at, edge in enumerate(("open", "close"))
        },
        "sensor_room": np.array([r.sensors.get("room", (nan,))[0] for r in readings], np.float64),
        "sensor_room_at_ns": np.array(
            [r.sensors["room"][2] if "room" in r.sensors else -1 for r in readings], np.int64
        ),
    }
