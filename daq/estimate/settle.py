"""Settling: what complete pairs say, by the estimator that suits them, until another pair is complete."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.choice import JOINT, MONITORED, PLAIN, Choice, choose, monitor_taking
from daq.estimate.exclusions import without_exclusions
from daq.estimate.headline import headline
from daq.estimate.irregular import irregular
from daq.estimate.joint import UnsettledError
from daq.estimate.levels import walk_per_s, walk_variance
from daq.estimate.linearity import dead_time_left_s
from daq.estimate.plan import Plan
from daq.estimate.sums import Taking, plainly, sums_of
from daq.estimate.tables import Tables, tables_of
from daq.estimate.terms import terms_of
from daq.estimate.veil import veiled
from daq.estimate.visits import Visits, complete_pairs

SECONDS_PER_HOUR = 3600.0


@dataclass(frozen=True, slots=True)
class Settled:
    """The numbers of complete pairs by name, and the estimator that they come from.

    `strength` of the source by visit, where it was fitted.
    """

    estimator: str
    numbers: Mapping[str, Any]
    strength: FloatArray | None = None


def settle(visits: Visits, plan: Plan) -> Settled:
    """Return what the complete pairs of a run say."""
    choice = choose(visits, plan)
    found, why_not = None, "the joint fit needs visits one after another"
    if choice.estimator == JOINT:
        try:
            found = _by_joint_fit(visits, plan, choice)
        except UnsettledError as error:
            why_not = f"{error}; whole stands are compared"
    if found is None:
        found = _by_contrast(visits, plan, choice, why_not)
    numbers = {**found.numbers, **without_exclusions(visits, plan)}
    return Settled(found.estimator, numbers, found.strength)


def taking(settled: Settled, visits: Visits, plan: Plan) -> Taking:
    """Return how visits are taken into sums by a settled estimator."""
    if settled.estimator == MONITORED:
        return monitor_taking(visits, plan)
    if settled.strength is None:
        return plainly(visits, plan)
    return Taking(visits.good & (plan.stand >= 0), settled.strength, np.zeros(len(settled.strength)))


def told(tables: Tables, pairs: int, plan: Plan, **more: Any) -> dict[str, Any]:
    """Return headline, terms and linearity of tables as numbers by name, and more beside them."""
    tables = veiled(tables, plan)
    left_s = dead_time_left_s(tables, plan)
    linearity = {} if left_s is None else {"dead_time_left_s": left_s[0], "dead_time_left_se_s": left_s[1]}
    return {**headline(tables, pairs, plan), "terms": terms_of(tables, plan), **linearity, **more}


def _by_contrast(visits: Visits, plan: Plan, choice: Choice, why_not: str = "") -> Settled:
    """Return the contrast of totals, of live times or of live times scaled by the monitor.

    Parameters
    ----------
    why_not
        Why a joint fit that was chosen is not made.
    """
    if choice.estimator == JOINT:
        choice = Choice(PLAIN, why_not, choice.taken)
    sums = sums_of(visits, plan, taking(Settled(choice.estimator, {}), visits, plan))
    numbers = told(tables_of(sums), len(sums.value), plan, estimator=choice.estimator, why=choice.why)
    counting = numbers["kappa_counting_se"]
    if choice.taken is not None and counting is not None:
        per_s = walk_per_s(visits, plan, choice.taken)
        drift = 0.0 if choice.estimator == MONITORED else walk_variance(visits, choice.taken, per_s)
        numbers["kappa_model_se"] = sqrt(counting**2 + drift)
        numbers["drift_per_sqrt_hour"] = sqrt(per_s * SECONDS_PER_HOUR)
    return Settled(choice.estimator, numbers)


def _by_joint_fit(visits: Visits, plan: Plan, choice: Choice) -> Settled | None:
    """Return the joint fit, or the monitor's contrast where that is the better of the two."""
    fitted = irregular(visits, plan)
    if fitted is None:
        return None
    if plan.monitor is not None and choice.taken is not None:
        why = f"{choice.why}, and the monitor knows the source better than a fit does"
        monitored = _by_contrast(visits, plan, Choice(MONITORED, why, choice.taken))
        counting = monitored.numbers["kappa_counting_se"]
        if counting is not None and counting < fitted.model_se:
            return monitored
    numbers = told(
        fitted.tables,
        len(complete_pairs(visits, plan)),
        plan,
        estimator=JOINT,
        why=choice.why,
        kappa_model_se=fitted.model_se,
        drift_per_sqrt_hour=sqrt(fitted.per_s * SECONDS_PER_HOUR),
    )
    return Settled(JOINT, numbers, fitted.strength)
