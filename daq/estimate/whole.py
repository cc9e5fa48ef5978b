"""The whole estimate: what page and report show of a run, from its visits or its sums."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from math import isfinite
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.choice import PLAIN
from daq.estimate.headline import by_position
from daq.estimate.plan import Plan
from daq.estimate.settle import Settled, settle, taking, told
from daq.estimate.sums import Sums, sums_of
from daq.estimate.tables import tables_of
from daq.estimate.terms import Terms
from daq.estimate.visits import Visits

Interval = tuple[float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Estimate:
    """What a run says so far.

    Kappa, epsilon, delta and their bars rest on complete pairs. The tables by position, `rates_hz` (J, K) and
    the columns (J), rest on every stand used so far (NaN where nothing was counted), as do the numbers of
    visits and stands. `kappa_se` is the jackknife over pairs (None below two), `kappa_counting_se` what
    counting alone gives, `excess` their ratio; `interval_95` is the t bar, valid when read once, at the
    planned end; `whole_night_95` the band that holds at every look (None while infinite). `forecast_se` is
    expected at the planned end. `epsilon` and `delta` are weighted means [1/s]; `epsilon_se` is a jackknife
    too. `printable`: delta is large enough for kappa to be told, else epsilon is. `terms` holds every order.

    `estimator` and `why` it was chosen; `kappa_model_se` what counting and the source as a random walk
    (`drift_per_sqrt_hour`) give; `kappa_with_excluded` the plain contrast with the stands that are left out,
    and how far it may lie from that without them (None: nothing is left out); `dead_time_left_s` what the
    pattern shows of a dead time after the correction (zero: the counter is linear).
    """

    kappa: float | None
    kappa_se: float | None
    kappa_counting_se: float | None
    interval_95: Interval | None
    whole_night_95: Interval | None
    excess: float | None
    excess_se: float | None
    forecast_se: float | None
    goal_se: float | None
    epsilon: float | None
    epsilon_se: float | None
    epsilon_counting_se: float | None
    delta: float | None
    delta_se: float | None
    printable: bool
    pairs: int
    planned_pairs: int
    visits: int
    stands_used: int
    stands_left_out: int
    normalisation: str
    rates_hz: FloatArray
    rates_se_hz: FloatArray
    epsilon_hz: FloatArray
    epsilon_se_hz: FloatArray
    delta_hz: FloatArray
    estimator: str = PLAIN
    why: str = ""
    dof: int | None = None
    kappa_model_se: float | None = None
    drift_per_sqrt_hour: float | None = None
    kappa_with_excluded: float | None = None
    excluded_change_se: float | None = None
    dead_time_left_s: float | None = None
    dead_time_left_se_s: float | None = None
    terms: Terms | None = None

    def to_json(self) -> dict[str, Any]:
        """Return the estimate as plain lists and numbers, None for what is undefined."""
        return {field.name: _plain(getattr(self, field.name)) for field in fields(self)}


def estimate_visits(visits: Visits, plan: Plan, settled: Settled | None = None) -> Estimate:
    """Return the estimate of a run from its visits, by the estimator that suits them.

    Parameters
    ----------
    settled
        What `settle` gave for the same complete pairs, where it is known already.
    """
    settled = settle(visits, plan) if settled is None else settled
    return _estimate(sums_of(visits, plan, taking(settled, visits, plan)), plan, settled.numbers)


def estimate_sums(sums: Sums, plan: Plan) -> Estimate:
    """Return the estimate that sums over complete pairs give, by the plain contrast.

    Notes
    -----
    Positions without live time (every stand left out) carry no weight. The plain contrast of totals is best
    linear unbiased for complete mirrored pairs under a random walk of the source.
    """
    return _estimate(sums, plan, told(tables_of(sums), len(sums.value), plan))


def _estimate(sums: Sums, plan: Plan, numbers: Mapping[str, Any]) -> Estimate:
    return Estimate(
        **numbers,
        **by_position(sums, plan),
        goal_se=plan.goal_se,
        planned_pairs=plan.planned_pairs,
        visits=sums.visits,
        stands_used=sums.stands_used,
        stands_left_out=sums.stands_left_out,
        normalisation=plan.normalisation,
    )


def _plain(value: Any) -> Any:
    if isinstance(value, Terms):
        return _plain(value.to_json())
    if isinstance(value, dict):
        return {key: _plain(inner) for key, inner in value.items()}
    if isinstance(value, np.ndarray):
        return [_plain(inner) for inner in value.tolist()]
    if isinstance(value, (tuple, list)):
        return [_plain(inner) for inner in value]
    return None if isinstance(value, float) and not isfinite(value) else value
