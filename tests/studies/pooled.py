"""Pooled nights: how often the interval of several nights covers the common kappa."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from daq.estimate.pooling import leave_one_out, pool
from tests.studies.figures import within
from tests.studies.pairs import share
from tests.studies.rows import Each, rows
from tests.studies.scaled import drawn

SETS = 20_000
TOGETHER = 100  # sets of one draw
DOF, SPREAD = 18, 0.5
EQUAL, SCATTERED = (2, 3, 5, 10, 20), ((5, 1.0), (5, 2.0), (10, 1.0), (20, 2.0))


def study(sets: int = SETS, each: Each = rows) -> dict[str, Any]:
    """Return coverage and false alarms, by number of nights and scatter between them."""
    wanted = {f"{nights} nights": [nights, 0.0, sets] for nights in EQUAL}
    few = max(TOGETHER, 3 * sets // 10)
    wanted |= {f"{nights} nights, scatter {tau:g}": [nights, tau, few] for nights, tau in SCATTERED}
    return {
        "about": f"standard errors of {DOF} degrees of freedom, sizes e^±{SPREAD:g}; scatter between nights "
        "in units of a night's error",
        "rows": each("pooled:row", wanted),
    }


def sets(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, Any]:
    """Return for some sets of nights what their intervals cover and what the tests of equality say."""
    nights, tau = parameters["nights"], parameters["tau"]
    found: dict[str, list[float]] = {}
    for _ in range(TOGETHER):
        sigma = np.exp(generator.uniform(-SPREAD, SPREAD, nights))
        value = sigma * generator.standard_normal(nights) + tau * generator.standard_normal(nights)
        se = sigma * np.sqrt(generator.chisquare(DOF, nights) / DOF)
        one = pool(value, se, np.full(nights, DOF), weights=sigma**-2)
        odd = min(left.p for left in leave_one_out(value, se, np.full(nights, DOF)))
        wide = one.random_interval_95
        told = {
            "count weights": _covers(one.interval_95),
            "Paule-Mandel": float("nan") if wide is None else _covers(wide),
            "chi-squared alarms": float(one.q_p <= 0.05),
            "Welch alarms": float(one.welch_p <= 0.05),
            "one night alarms": float(odd <= 0.05),
        }
        for name, number in told.items():
            found.setdefault(name, []).append(number)
    return found


def _covers(ends: tuple[float, float]) -> float:
    return float(ends[0] <= 0 <= ends[1])


def row(nights: int, tau: float, number: int) -> dict[str, Any]:
    """Return the figures of so many nights with a scatter between them."""
    found = drawn("pooled:sets", -(-number // TOGETHER), {"nights": nights, "tau": tau})
    shares = {name: share(column)["share"] for name, column in found.items() if not np.isnan(column).any()}
    meets = {"Paule-Mandel": shares.get("Paule-Mandel", 0.0) >= 0.94}
    if tau == 0:
        covered = within(shares["count weights"], 0.94, 0.96)
        meets = {"count weights": covered, "Welch": within(shares["Welch alarms"], 0.035, 0.065)}
    return {"nights": len(found["count weights"]), **shares, "meets": meets}
