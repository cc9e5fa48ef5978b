"""Random order with a tenth of the visits lost, under every source: the joint fit and its refitted bar."""

from __future__ import annotations

from math import sqrt
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.choice import JOINT
from daq.estimate.visits import Visits
from daq.estimate.whole import estimate_visits
from tests.studies.bench import Night, generator_of, reduced, shuffled, strengths, visits_of_counts
from tests.studies.figures import figures, within
from tests.studies.rows import Each, rows
from tests.studies.sources import SOURCES

NIGHTS = 400
LOST = 0.1


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return the figures of every source, and whether each meets its target."""
    of = reduced()
    return {
        "about": f"{len(of.plan.stand)} visits, every stand in random order, {100 * LOST:.0f} % lost; "
        "bias and sd in counting bars of the visits that were taken",
        "counting_se": _counting_se(of),
        "rows": each("irregular:row", {source: [source, nights] for source in SOURCES}),
    }


def row(source: str, nights: int) -> dict[str, Any]:
    """Return the figures of one source."""
    of = reduced()
    generator = generator_of("irregular", source)
    found = []
    for strength in strengths(of, source, nights, generator, at_once=20):
        found += [_estimate(of, one, generator) for one in strength]
    kappa, se, model_se = np.array(found).T
    numbers = figures(kappa, se, of.plan.planned_pairs - 1, _counting_se(of))
    numbers["model_coverage_95"] = float(np.mean(np.abs(kappa) <= 1.96 * model_se))
    flicker = source == "flicker"
    return numbers | {
        "meets": {
            "bias": abs(numbers["bias"]) <= 0.1 + 2 * numbers["bias_se"],
            "sd": flicker or numbers["sd"] <= 1.12 + 2 * numbers["sd_se"],
            "coverage": within(numbers["coverage_95"], 0.93, 0.98),
        }
    }


def _counting_se(of: Night) -> float:
    return of.counting_se / sqrt(1 - LOST)


def _estimate(of: Night, strength: FloatArray, generator: np.random.Generator) -> tuple[float, float, float]:
    mixed = shuffled(of, generator)
    visits = visits_of_counts(mixed, generator.poisson(mixed.expected * strength).astype(float))
    _lose(visits, mixed, generator)
    found = estimate_visits(visits, mixed.plan)
    assert found.estimator == JOINT
    assert found.kappa is not None and found.kappa_se is not None and found.kappa_model_se is not None
    return found.kappa, found.kappa_se, found.kappa_model_se


def _lose(visits: Visits, of: Night, generator: np.random.Generator) -> None:
    """Lose visits at random: the stands that they are part of are left out of the plain sums."""
    visits.good[:] = generator.random(len(visits.good)) >= LOST
    visits.used[:] = True
    visits.used[of.plan.stand[~visits.good]] = False
