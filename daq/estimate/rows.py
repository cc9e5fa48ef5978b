"""Rows: planned visits as they came home, every channel of them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import nan

import numpy as np

from daq.estimate.arrays import FloatArray, IntArray
from daq.records import Reading

DETECTOR = 0  # the channel that is estimated; others stand beside it


@dataclass(frozen=True, slots=True)
class Rows:
    """Planned visits as they came home, by row: numbers, try, quality, and what the channels gave (N, C).

    `values` counts (or power), `variances` of them (NaN: Poisson), `live` seconds, `middle_s` the middle of
    the gate on the run clock.
    """

    visit: IntArray
    attempt: IntArray
    quality: IntArray
    values: FloatArray
    variances: FloatArray
    live: FloatArray
    middle_s: FloatArray


def rows_of_readings(readings: Sequence[Reading]) -> Rows:
    """Return readings of planned visits as rows."""
    nothing = (nan,) * len(readings[0].values)
    return Rows(
        np.array([reading.visit for reading in readings], np.int64),
        np.array([reading.attempt for reading in readings], np.int64),
        np.array([int(reading.quality) for reading in readings], np.int64),
        np.array([reading.values for reading in readings], float),
        np.array([reading.values_var or nothing for reading in readings], float),
        np.array([reading.live_s for reading in readings], float),
        np.array([(reading.gate_open_ns + reading.gate_close_ns) / 2e9 for reading in readings]),
    )
