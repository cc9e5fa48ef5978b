"""Small made-up nights: a plan, readings of it, and the dataset that an archive would give."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, replace

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from daq import openings
from daq.estimate import Plan, expected_rates_hz, planned_weights, seen_rate_hz
from daq.estimate.arrays import FloatArray
from daq.records import Quality, Reading

SLITS_M = {"A": (-120e-6, 40e-6), "B": (0.0, 40e-6), "C": (120e-6, 40e-6)}
DEAD_TIME_S = 40e-9
ORDER = (1, 3, 2, 5, 7, 6, 4, 0)  # a forward stand
SLOT_S = 3.0


def rates_hz(positions_mm: ArrayLike) -> FloatArray:
    """Return the rates of three slits, (J, 8)."""
    cuts = {
        mask: {} if mask == 0 else {letter: SLITS_M[letter] for letter in openings.name(mask)}
        for mask in range(8)
    }
    return expected_rates_hz(cuts, positions_mm, 532e-9, 1.2, 40e3, 800.0)


def plan(positions: int = 3, laps: int = 4, dead_time_s: float = DEAD_TIME_S) -> Plan:
    """Return a zig-zag plan: every stand reversed, every second lap backwards."""
    positions_mm = np.linspace(-2.0, 2.0, positions) if positions > 1 else np.zeros(1)
    weights, signs = planned_weights(rates_hz(positions_mm), range(8), 3)
    stands = np.arange(positions * laps)
    lap = stands // positions
    place = np.where(lap % 2, positions - 1 - stands % positions, stands % positions)
    shown = np.concatenate([ORDER[:: -1 if stand % 2 else 1] for stand in stands])
    pair = np.where(lap // 2 < laps // 2, lap // 2, -1)
    return Plan(
        slits=3,
        openings=np.arange(8),
        positions_mm=positions_mm,
        weights=weights,
        signs=signs,
        normalisation="pairwise",
        dead_time_s=dead_time_s,
        dead_time_kind="non-paralysable",
        planned_pairs=laps // 2,
        stand=np.repeat(stands, 8),
        pair=np.repeat(pair, 8),
        position=np.repeat(place, 8),
        opening=shown,
    )


def shuffled(of: Plan, generator: np.random.Generator) -> Plan:
    """Return a plan whose stands show their openings in any order."""
    order = np.concatenate([stand * 8 + generator.permutation(8) for stand in range(len(of.stand) // 8)])
    return replace(of, opening=of.opening[order])


def readings(
    of: Plan, generator: np.random.Generator, level: FloatArray | None = None, dwell_s: float = 2.2
) -> list[Reading]:
    """Return one reading of every visit, Poisson counts behind the plan's dead time.

    `level` is the source's relative strength by visit.
    """
    true = rates_hz(of.positions_mm)[of.position, of.opening] * (1.0 if level is None else level)
    seen = seen_rate_hz(true, of.dead_time_s, of.dead_time_kind)
    counts = generator.poisson(seen * dwell_s)
    return [reading(of, number, int(counts[number]), dwell_s) for number in range(len(counts))]


def reading(of: Plan, number: int, counts: float, dwell_s: float = 2.2) -> Reading:
    """Return the reading of one planned visit."""
    opens_ns = round(number * SLOT_S * 1e9)
    return Reading(
        visit=number,
        attempt=1,
        opening=int(of.openings[of.opening[number]]),
        position_mm=float(of.positions_mm[of.position[number]]),
        dwell_s=dwell_s,
        gate_open_ns=opens_ns,
        gate_close_ns=opens_ns + round(dwell_s * 1e9),
        utc_ns=opens_ns,
        live_s=dwell_s,
        values=(counts,),
    )


def monitored(
    rows: Sequence[Reading], generator: np.random.Generator, level: FloatArray, counts: float = 1e6
) -> list[Reading]:
    """Return readings with a second channel that counts the source itself."""
    beside = generator.poisson(counts * level)
    return [replace(row, values=(*row.values, float(beside[row.visit]))) for row in rows]


def again(of: Reading, attempt: int, counts: float, quality: Quality = Quality.GOOD) -> Reading:
    """Return another try of a visit."""
    return replace(of, attempt=attempt, values=(counts,), quality=quality)


def dataset(of: Plan, rows: Sequence[Reading]) -> xr.Dataset:
    """Return the dataset that an archive of these readings opens as, as far as the estimate reads it."""
    visit = np.array([row.visit for row in rows], np.int64)
    planned = visit >= 0
    columns = {
        "visit": visit,
        "attempt": np.array([row.attempt for row in rows]),
        "opening": np.array([row.opening for row in rows]),
        "position_mm": np.array([row.position_mm for row in rows]),
        "live_s": np.array([row.live_s for row in rows]),
        "quality": np.array([int(row.quality) for row in rows]),
        "gate_open_ns": np.array([row.gate_open_ns for row in rows], np.int64),
        "gate_close_ns": np.array([row.gate_close_ns for row in rows], np.int64),
        "utc_ns": np.array([row.utc_ns for row in rows], np.int64),
        "dwell_s": np.array([row.dwell_s for row in rows], float),
        "stand": np.where(planned, of.stand[visit], -1),
        "pair": np.where(planned, of.pair[visit], -1),
    }
    channels = len(rows[0].values) if rows else 1
    values = np.array([row.values for row in rows]).reshape(len(rows), channels)
    variances = np.array([row.values_var or [np.nan] * channels for row in rows]).reshape(values.shape)
    return xr.Dataset(
        {name: ("row", column) for name, column in columns.items()}
        | {"values": (("row", "channel"), values), "values_var": (("row", "channel"), variances)},
        attrs={
            "slits": of.slits,
            "openings": of.openings.tolist(),
            "positions_mm": of.positions_mm.tolist(),
            "weights": of.weights.tolist(),
            "signs": {term: signs.tolist() for term, signs in of.signs.items()},
            "normalisation": of.normalisation,
            "dead_time_s": of.dead_time_s,
            "dead_time_kind": of.dead_time_kind,
            "planned_pairs": of.planned_pairs,
            "counting": of.counting,
            "fano": of.fano,
            "monitor_channel": of.monitor,
            "heralded": None if of.heralded is None else asdict(of.heralded),
        },
    )
