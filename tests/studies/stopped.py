"""Stopped nights: what is left of 95 % where the counting error, or the scatter itself, chooses the end."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.stopping import FUTILITY, GOAL, Stopping, due
from tests.studies.figures import within
from tests.studies.pairs import TOGETHER, counted, pairs_of, planned, quantile, share
from tests.studies.rows import Each, rows
from tests.studies.scaled import drawn
from tests.studies.sources import SOURCES

NIGHTS = 2000
POSITIONS, PAIRS, GOAL_AT, DWELL_S = 11, 38, 19, 4.4
RULES = ("goal", "excess of pair 8", "own scatter from 8", "significance from 3", "futility")
PLANNED_EXCESS = {"flicker": 4.0, "random walk": 1.1}


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return the coverage of the t bar at the end that each rule chose, by source."""
    return {
        "about": f"Lantern, {POSITIONS} positions, at most {PAIRS} pairs, a goal that is met about pair "
        f"{GOAL_AT}; share of nights whose t bar covers the true kappa where the rule ends the run",
        "rows": each("stopped:row", {source: [source, nights] for source in SOURCES}),
    }


def nights(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, Any]:
    """Return for every rule whether the bar at its end covers, and after how many pairs that was."""
    of = planned(POSITIONS, PAIRS, DWELL_S, int(generator.integers(2**40)))
    pairs = pairs_of(of, counted(of, parameters["source"], generator))
    after = [pairs.after(many) for many in range(2, PAIRS + 1)]
    kappa, se, counting = (np.array([one[part] for one in after]) for part in range(3))
    excess = parameters["excess"]
    rules = Stopping(of.counting_se * np.sqrt(PAIRS / GOAL_AT) * excess, excess=excess)
    found: dict[str, Any] = {}
    for rule in RULES:
        ends = [_end(rule, kappa[:, one], se[:, one], counting[:, one], rules) for one in range(TOGETHER)]
        quantiles = np.array([quantile(end) for end in ends])
        at = np.array(ends) - 2, np.arange(TOGETHER)
        found[rule] = (np.abs(kappa[at]) <= quantiles * se[at]).astype(float)
        found[f"{rule}, pairs"] = np.array(ends, float)
    return found


def _end(rule: str, kappa: FloatArray, se: FloatArray, counting: FloatArray, goal: Stopping) -> int:
    """Return after how many pairs a rule ends a night."""
    shown = replace(goal, excess=float(se[6] / counting[6]))
    for pairs in range(3, PAIRS):
        k, s, c = (float(column[pairs - 2]) for column in (kappa, se, counting))
        numbers = {"kappa": k, "kappa_se": s, "kappa_counting_se": c, "pairs": pairs, "planned_pairs": PAIRS}
        ends = {
            "goal": due(goal, numbers) == GOAL,
            "excess of pair 8": due(shown, numbers) == GOAL,
            "own scatter from 8": pairs >= 8 and s <= (goal.goal_se or 0.0),
            "significance from 3": abs(k) > quantile(pairs) * s,
            "futility": due(Stopping(futility=True), numbers) == FUTILITY,
        }
        if ends[rule]:
            return pairs
    return PAIRS


def row(source: str, nights: int) -> dict[str, Any]:
    """Return the figures of one source."""
    parameters = {"source": source, "excess": PLANNED_EXCESS.get(source, 1.0)}
    found = drawn("stopped:nights", -(-nights // TOGETHER), parameters)
    shares = {rule: share(found[rule])["share"] for rule in RULES}
    return {
        "nights": len(found["goal"]),
        **shares,
        "goal, pairs": float(found["goal, pairs"].mean()),
        "meets": {
            "goal": within(shares["goal"], 0.938, 0.964),
            "significance fails": shares["significance from 3"] < 0.85,
        },
    }
