"""Benches with few counts a visit, with power readings and their repeats, with bunched counts: coverage."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from daq.estimate import Plan
from daq.estimate.arrays import FloatArray
from daq.estimate.detected import detected
from daq.estimate.headline import headline
from daq.estimate.rows import Rows
from daq.estimate.sums import sums_of
from daq.estimate.tables import tables_of
from daq.estimate.visits import visits_of
from tests.studies.bench import Night, generator_of, reduced, strengths
from tests.studies.figures import figures, within
from tests.studies.rows import Each, rows

NIGHTS = 2000
FEW = 2e-4  # of Lantern's rates: 0.4 to 160 counts a visit
REPEATS = 10
NOISE_W = 2e-12  # of one power reading; a count a second is taken for a femtowatt
WATTS = 1e-15

Drawing = Callable[[FloatArray, FloatArray, np.random.Generator], tuple[FloatArray, FloatArray]]


def _few(
    rate_hz: FloatArray, live_s: FloatArray, generator: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    counts = generator.poisson(FEW * rate_hz * live_s).astype(float)
    return counts, np.full(counts.shape, np.nan)


def _power(
    rate_hz: FloatArray, live_s: FloatArray, generator: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return means and variances of repeated readings, their noise the same in light and darkness."""
    taken = WATTS * (rate_hz - rate_hz.min()) + NOISE_W * generator.standard_normal((REPEATS, len(rate_hz)))
    return taken.mean(axis=0), taken.var(axis=0, ddof=1) / REPEATS


def _bunched(
    rate_hz: FloatArray, live_s: FloatArray, generator: np.random.Generator
) -> tuple[FloatArray, FloatArray]:
    """Return counts each of which brings another with probability 0.2."""
    first = generator.poisson(rate_hz * live_s / 1.2)
    counts = (first + generator.binomial(first, 0.2)).astype(float)
    return counts, np.full(counts.shape, np.nan)


BENCHES: dict[str, tuple[Drawing, dict[str, Any]]] = {
    "few counts": (_few, {}),
    "power": (_power, {"counting": "power"}),
    "bunched counts": (_bunched, {"fano": 1.6 / 1.2}),
}


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return the figures of every bench on a walking source, and whether each meets its target."""
    of = reduced()
    return {
        "about": f"{len(of.plan.stand)} visits, zig-zag, random walk of 3 % per square root of an hour; "
        "bias and sd in mean counting bars",
        "rows": each("benches:row", {name: [name, nights] for name in BENCHES}),
    }


def row(name: str, nights: int) -> dict[str, Any]:
    """Return the figures of one bench."""
    of = reduced()
    draw, changes = BENCHES[name]
    plan = replace(of.plan, **changes)
    generator, numbers = generator_of("benches", name), []
    for strength in strengths(of, "random walk", nights, generator):
        numbers += [_night(of, plan, draw, one, generator) for one in strength]
    kappa, se, counting = (
        np.array([found[key] for found in numbers]) for key in ("kappa", "kappa_se", "kappa_counting_se")
    )
    found = figures(kappa, se, plan.planned_pairs - 1, float(counting.mean()))
    return found | {
        "printable": float(np.mean([one["printable"] for one in numbers])),
        "meets": {
            "coverage": within(found["coverage_95"], 0.93, 0.97),
            "bias": abs(found["bias"]) <= 0.1 + 2 * found["bias_se"],
        },
    }


def _night(
    of: Night, plan: Plan, draw: Drawing, strength: FloatArray, generator: np.random.Generator
) -> dict[str, Any]:
    rate_hz = of.rates_hz[plan.position, plan.opening] * strength
    values, variances = draw(rate_hz, of.dwell_s, generator)
    number = np.arange(len(values))
    rows = Rows(
        number,
        np.ones_like(number),
        np.zeros_like(number),
        values[:, None],
        variances[:, None],
        of.dwell_s,
        of.time_s,
    )
    assert detected(rows, plan).fine.all()
    sums = sums_of(visits_of(rows, plan), plan)
    return dict(headline(tables_of(sums), plan.planned_pairs, plan))
