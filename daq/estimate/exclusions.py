"""Exclusions: what kappa would be if no stand were left out, and how far it may move."""

from __future__ import annotations

from collections.abc import Mapping
from math import sqrt

import numpy as np

from daq.estimate.arrays import BoolArray
from daq.estimate.plan import Plan
from daq.estimate.residual import weighted_kappa
from daq.estimate.sums import plainly, sums_of
from daq.estimate.tables import plan_contrast, tables_of
from daq.estimate.veil import veiled
from daq.estimate.visits import Visits, complete_pairs


def without_exclusions(visits: Visits, plan: Plan) -> Mapping[str, float]:
    """Return the plain kappa with every stand that gave numbers, and the error of its change.

    Nothing where no such stand is left out, or kappa has no divisor.

    Notes
    -----
    The stands kept are part of all stands: the change has the variance of the kept ones less that of all.
    More than three of its standard errors say that the exclusions move the result.
    """
    inside = np.isin(plan.stand_places[0], complete_pairs(visits, plan))
    spare = visits.done & visits.countable & ~visits.used & inside
    if not spare.any():
        return {}
    kept, every = (_plain(visits, plan, stands) for stands in (visits.used, visits.used | spare))
    if kept is None or every is None:
        return {}
    change_se = sqrt(max(kept[1] ** 2 - every[1] ** 2, 0.0))
    return {"kappa_with_excluded": every[0], "excluded_change_se": change_se}


def _plain(visits: Visits, plan: Plan, stands: BoolArray) -> tuple[float, float] | None:
    tables = veiled(tables_of(sums_of(visits, plan, plainly(visits, plan, stands))), plan)
    what, signs = plan_contrast(plan)
    weights = np.where(tables.measured, plan.weights, 0.0)
    try:
        return weighted_kappa(tables.rates, tables.variances, weights, what, signs, plan.normalisation)
    except ValueError:  # no divisor above zero: there is no kappa to compare
        return None
