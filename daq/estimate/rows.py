"""Rows: planned visits as they came home, every channel of them."""

from __future__ import annotations

from dataclasses import dataclass

from daq.estimate.arrays import FloatArray, IntArray

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
