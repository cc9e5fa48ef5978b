"""Places: tests of every position by turning pairs over, on null nights and on nights that have something."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.positions import leftover_by_pair, position_tests, sign_flips
from tests.studies.bench import Night
from tests.studies.figures import within
from tests.studies.pairs import TOGETHER, counted, planned, share, sums_of_night
from tests.studies.rows import Each, rows
from tests.studies.scaled import drawn
from tests.studies.sources import SOURCES

NIGHTS = 2000
SMALL = {"positions": 11, "pairs": 20, "dwell_s": 8.8}
WHOLE = {"positions": 41, "pairs": 19, "dwell_s": 2.2}
SIZE = 4.5  # standard deviations, in all
SHAPES = ("one position", "three periods")


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return the shares of nights with p up to 5 %: false alarms by source, then what is found."""
    wanted = {source: [source, None, nights] for source in SOURCES}
    wanted |= {f"{shape}, random walk": ["random walk", shape, nights // 2] for shape in SHAPES}
    return {
        "about": "Lantern, 11 positions and 20 pairs; to be found: 41 positions and 19 pairs, 4.5 sd in all; "
        "share of nights with p up to 5 %",
        "rows": each("places:row", wanted),
    }


def nights(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, Any]:
    """Return the p of every test of some nights."""
    seed = int(generator.integers(2**40))
    of = planned(parameters["positions"], parameters["pairs"], parameters["dwell_s"], seed)
    put_in = _shape(of, parameters["shape"], generator)
    found = []
    for counts in counted(of, parameters["source"], generator):
        sums = sums_of_night(of, counts)
        rest, _ = leftover_by_pair(sums, of.plan)
        spread = rest.std(axis=0, ddof=1) / np.sqrt(len(rest))
        sums.value[:, :, -1] += put_in * spread * sums.live[:, :, -1]
        rest, variance = leftover_by_pair(sums, of.plan)
        tests = position_tests(rest, variance, of.plan.positions_mm, sign_flips(len(rest), generator))
        found.append((tests.chi2_p, tests.largest_p, tests.fourier_p, tests.combined_p))
    names = ("chi-squared", "largest", "Fourier", "combined")
    return {name: [one[at] for one in found] for at, name in enumerate(names)}


def _shape(of: Night, shape: str | None, generator: np.random.Generator) -> FloatArray:
    """Return what is added to the means, in their own standard deviations."""
    places = len(of.plan.positions_mm)
    found = np.zeros(places)
    if shape == "one position":
        found[generator.integers(places)] = SIZE
    if shape == "three periods":
        wave = np.sin(2 * np.pi * (3 * np.arange(places) / places + generator.random()))
        found = SIZE * wave / np.sqrt(np.sum(wave**2))
    return found


def _shares(source: str, nights: int, shape: str | None, of: Mapping[str, Any]) -> dict[str, Any]:
    parameters = {"source": source, "shape": shape, **of}
    found = drawn("places:nights", -(-nights // TOGETHER), parameters)
    shares = {name: share(np.asarray(column) <= 0.05)["share"] for name, column in found.items()}
    return {"nights": len(found["combined"]), **shares}


def row(source: str, shape: str | None, nights: int) -> dict[str, Any]:
    """Return the figures of null nights of a source, or of nights that have something of a shape."""
    return _null(source, nights) if shape is None else _found(shape, nights)


def _null(source: str, nights: int) -> dict[str, Any]:
    found = _shares(source, nights, None, SMALL)
    names = ("chi-squared", "largest", "Fourier")
    return found | {"meets": {name: within(found[name], 0.035, 0.065) for name in names}}


def _found(shape: str, nights: int) -> dict[str, Any]:
    found = _shares("random walk", nights, shape, WHOLE)
    test, least = ("largest", 0.70) if shape == "one position" else ("Fourier", 0.80)
    return found | {"meets": {test: found[test] >= least}}
