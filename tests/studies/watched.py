"""Watched nights: how often a band that is looked at after every pair leaves zero although kappa is zero."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from daq.estimate.peeking import anytime_multiplier, hard_end_multiplier
from tests.studies.figures import within
from tests.studies.pairs import TOGETHER, counted, pairs_of, planned, quantile, share
from tests.studies.rows import Each, rows
from tests.studies.scaled import drawn
from tests.studies.sources import SOURCES

NIGHTS = 2000
POSITIONS, PAIRS, DWELL_S = 11, 20, 8.8  # ten hours, a pair in half an hour


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return how often each band leaves zero, by source."""
    return {
        "about": f"Lantern, {POSITIONS} positions, {PAIRS} pairs of half an hour, kappa zero; "
        "share of nights in which the band leaves zero",
        "rows": each("watched:row", {source: [source, nights] for source in SOURCES}),
    }


def nights(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, Any]:
    """Return what became of some nights with coins of their own."""
    of = planned(POSITIONS, PAIRS, DWELL_S, int(generator.integers(2**40)))
    pairs = pairs_of(of, counted(of, parameters["source"], generator))
    left = {name: np.zeros(TOGETHER, bool) for name in ("whole night", "hard end", "t from 2", "t from 8")}
    end = np.zeros(TOGETHER, bool)
    for many in range(2, PAIRS + 1):
        kappa, se, _ = pairs.after(many)
        far = np.abs(kappa) / se
        left["whole night"] |= far > anytime_multiplier(many, PAIRS)
        left["hard end"] |= far > hard_end_multiplier(many, PAIRS)
        end = far > quantile(many)
        left["t from 2"] |= end
        left["t from 8"] |= end if many >= 8 else False
    return {name: column.astype(float) for name, column in (left | {"t at the end": end}).items()}


def row(source: str, nights: int) -> dict[str, Any]:
    """Return the figures of one source."""
    found = drawn("watched:nights", -(-nights // TOGETHER), {"source": source})
    shares = {name: share(column) for name, column in found.items()}
    return {
        "nights": len(found["t at the end"]),
        **{name: one["share"] for name, one in shares.items()},
        "whole night se": shares["whole night"]["se"],
        "meets": {
            "whole night": shares["whole night"]["share"] <= 0.05,
            "t at the end": within(shares["t at the end"]["share"], 0.035, 0.065),
            "t watched fails": shares["t from 2"]["share"] > 0.15,
        },
    }
