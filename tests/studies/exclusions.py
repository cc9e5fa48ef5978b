"""Exclusions: half a percent of the visits lost while the source falls by 3 % an hour; no counting noise."""

from __future__ import annotations

from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.irregular import irregular
from daq.estimate.levels import levels
from daq.estimate.plan import Plan
from daq.estimate.sensitivity import taken_visits
from daq.estimate.sums import Sums, Taking, sums_of
from daq.estimate.tables import kappa_of, tables_of
from daq.estimate.visits import Visits
from tests.studies.bench import generator_of, night, visits_of_counts
from tests.studies.rows import Each, rows
from tests.studies.sources import SOURCES

NIGHTS = 60
LOST = 0.005


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return the rms error of kappa in counting standard errors, by what is done about the lost visits."""
    of = night()
    found = each("exclusions:errors", {"all": [nights]})["all"]
    return {
        "about": f"{len(of.plan.stand)} visits, {100 * LOST:g} % of them lost at random, -3 %/h, noise-free",
        "counting_se": of.counting_se,
        "rows": {name: _row(name, np.array(one) / of.counting_se) for name, one in found.items()},
    }


def errors(nights: int) -> dict[str, list[float]]:
    """Return the errors of kappa night by night; all nights share one generator, so they are one block."""
    of = night()
    generator = generator_of("exclusions", "linear")
    strength = SOURCES["linear"](of.time_s, 1, generator)[0]
    found: dict[str, list[float]] = {"whole stands dropped": [], "exposure scaled": [], "joint fit": []}
    found["lone visits dropped"] = []
    for _ in range(nights):
        visits = visits_of_counts(of, of.expected * strength)
        visits.good[:] = generator.random(len(visits.good)) >= LOST
        visits.used[of.plan.stand[~visits.good]] = False
        found["whole stands dropped"].append(_kappa(sums_of(visits, of.plan), of.plan))
        found["exposure scaled"].append(_kappa(_scaled(visits, of.plan), of.plan))
        found["joint fit"].append(_joint(visits, of.plan))
        lone = Taking(visits.good, *_nothing(visits))
        found["lone visits dropped"].append(_kappa(sums_of(visits, of.plan, lone), of.plan))
    return found


def _row(name: str, error: FloatArray) -> dict[str, Any]:
    rms, largest = float(np.sqrt(np.mean(error**2))), float(np.abs(error).max())
    meets = {"error": rms > 1} if name == "lone visits dropped" else {"error": largest <= 0.05}
    return {"nights": len(error), "rms": rms, "largest": largest, "meets": meets}


def _kappa(sums: Sums, plan: Plan) -> float:
    tables = tables_of(sums)
    return float(kappa_of(tables.rates, tables.measured, plan))


def _scaled(visits: Visits, plan: Plan) -> Sums:
    """Return sums over every good visit, the level of its stand as exposure."""
    taken = taken_visits(visits, plan, visits.good)
    assert taken is not None
    level, _ = levels(visits, plan, taken)
    return sums_of(visits, plan, Taking(visits.good, level[plan.stand], _nothing(visits)[1]))


def _joint(visits: Visits, plan: Plan) -> float:
    fitted = irregular(visits, plan)
    assert fitted is not None
    return float(kappa_of(fitted.tables.rates, fitted.tables.measured, plan))


def _nothing(visits: Visits) -> tuple[FloatArray, FloatArray]:
    return np.ones(len(visits.value)), np.zeros(len(visits.value))
