"""Checks: what should agree within a run when nothing is wrong, and how odd each difference is."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np
from scipy.special import fdtrc, stdtr

from daq.estimate.arrays import BoolArray, FloatArray
from daq.estimate.budget import smooth_drift
from daq.estimate.contrast import epsilon_and_delta
from daq.estimate.counting import scatter
from daq.estimate.plan import Plan
from daq.estimate.quality import Rules, fingerprint
from daq.estimate.sensitivity import Taken
from daq.estimate.sums import plainly, sums_of
from daq.estimate.tables import Tables, plan_contrast, tables_of
from daq.estimate.veil import veiled
from daq.estimate.visits import Visits


@dataclass(frozen=True, slots=True, kw_only=True)
class Check:
    """A figure that should be near what is expected; `p` how often chance alone is farther off."""

    name: str
    value: float
    expected: float
    se: float | None
    p: float
    unit: str = ""


def checks(visits: Visits, plan: Plan, taken: Taken, numbers: Mapping[str, Any]) -> tuple[Check, ...]:
    """Return the checks that the run has data for."""
    sums = sums_of(visits, plan)
    found = [*_by_numbers(numbers)]
    if len(sums.value) >= 4:
        found += [_odd_and_even(sums.value, sums.live, plan)]
        found += [*_there_and_back(visits, plan, taken)]
        found += [*_pattern(veiled(tables_of(sums), plan), plan, numbers)]
    return tuple(found)


def odd_first_stands(visits: Visits, plan: Plan, rules: Rules) -> list[float]:
    """Return the positions [mm] whose first stand does not fit the later ones: no rule could see it then."""
    _, position = plan.stand_places
    cells = len(plan.openings)
    wide = scatter(visits.value, visits.variance, plan.fano, plan.heralded is not None)
    shown = np.flatnonzero(plan.stand >= 0)  # of a damaged run visits may be lost before others
    place = (plan.stand * cells + plan.opening)[shown]
    counts, live = (
        np.bincount(place, column[shown], len(position) * cells).reshape(-1, cells)
        for column in (visits.value / wide, visits.live)
    )
    odd = []
    for at, where in enumerate(plan.positions_mm):
        stands = np.flatnonzero((position == at) & visits.used)
        if len(stands) > 2 and plan.counting == "counts":
            first, later = stands[0], stands[1:]
            match = fingerprint(
                counts[first], live[first], counts[later].sum(axis=0), live[later].sum(axis=0)
            )
            odd += [float(where)] if match.beyond(rules.fingerprint_p) else []
    return odd


def _by_numbers(numbers: Mapping[str, Any]) -> Iterator[Check]:
    dof = numbers.get("dof")
    excess, excess_se = numbers.get("excess"), numbers.get("excess_se")
    if dof and excess is not None and excess_se is not None:
        p = float(fdtrc(dof, 1e9, excess**2))
        yield Check(name="scatter of the pairs over counting", value=excess, expected=1.0, se=excess_se, p=p)
    left, left_se = numbers.get("dead_time_left_s"), numbers.get("dead_time_left_se_s")
    if dof and left is not None and left_se:
        yield Check(
            name="dead time left in the pattern", value=left, expected=0.0, se=left_se,
            p=_two_sided(left / left_se, dof), unit="s",
        )  # fmt: skip
    with_all, change_se = numbers.get("kappa_with_excluded"), numbers.get("excluded_change_se")
    if with_all is not None and change_se:
        change = with_all - numbers["kappa"]
        yield Check(
            name="kappa with the stands left out, less without", value=change, expected=0.0, se=change_se,
            p=_two_sided(change / change_se, 1e9),
        )  # fmt: skip


def _odd_and_even(value: FloatArray, live: FloatArray, plan: Plan) -> Check:
    """Return kappa of odd pairs less that of even ones, by the scatter within both groups."""
    by_pair = _by_block(value, live, plan)
    groups = by_pair[::2], by_pair[1::2]
    dof = len(by_pair) - 2
    within = sum(float(np.sum((group - group.mean()) ** 2)) for group in groups) / dof
    se = sqrt(within * sum(1 / len(group) for group in groups))
    apart = float(groups[0].mean() - groups[1].mean())
    return _difference("odd less even pairs", apart, 0.0, se, dof)


def _there_and_back(visits: Visits, plan: Plan, taken: Taken) -> Iterator[Check]:
    """Yield kappa of the first laps of the pairs less that of the second, against what drift makes of it."""
    first = _first_laps(plan)
    halves = [sums_of(visits, plan, plainly(visits, plan, visits.used & half)) for half in (first, ~first)]
    if not all(np.all(half.live.sum(axis=0) > 0) for half in halves):
        return
    by_pair = [_by_block(half.value, half.live, plan) for half in halves]
    apart = by_pair[0] - by_pair[1]
    sign = np.where(first[plan.stand[taken.visit]], 2.0, -2.0)  # each half has half of every exposure
    drift = smooth_drift(visits, plan, Taken(taken.visit, taken.weight * sign, taken.rates))
    se = float(apart.std(ddof=1)) / sqrt(len(apart))
    yield _difference("first less second laps", float(apart.mean()), drift, se, len(apart) - 1)


def _pattern(tables: Tables, plan: Plan, numbers: Mapping[str, Any]) -> Iterator[Check]:
    """Yield chi-squared over freedom of epsilon by position about kappa delta, in units of the excess."""
    what, signs = plan_contrast(plan)
    epsilon, delta = epsilon_and_delta(tables.rates, what, plan.normalisation, signs)
    variance = tables.variances @ what.residual**2
    seen = tables.measured & (variance > 0)
    excess, dof = numbers.get("excess"), numbers.get("dof")
    if seen.sum() < 3 or numbers.get("kappa") is None or not excess or not dof:
        return
    rest = (epsilon - numbers["kappa"] * delta)[seen]
    freedom = int(seen.sum()) - 1
    ratio = float(np.sum(rest**2 / variance[seen])) / freedom
    scale = max(excess, 1.0) ** 2
    p = float(fdtrc(freedom, dof, ratio / scale))
    yield Check(
        name="leftover by position, chi-squared over freedom", value=ratio, expected=scale, se=None, p=p
    )


def _by_block(value: FloatArray, live: FloatArray, plan: Plan) -> FloatArray:
    """Return kappa of every pair alone, all divided by the delta of all pairs."""
    what, signs = plan_contrast(plan)
    rates = np.divide(value, live, out=np.zeros_like(value), where=live > 0)
    seen: BoolArray = np.all(live > 0, axis=-1)
    weights = np.where(seen, plan.weights, 0.0)
    epsilon, delta = epsilon_and_delta(rates, what, plan.normalisation, signs)
    shares = weights.sum(axis=-1)
    mean = np.sum(weights * delta, axis=-1).sum() / shares.sum()
    return np.asarray(np.sum(weights * epsilon, axis=-1) / shares / mean)


def _first_laps(plan: Plan) -> BoolArray:
    """Return which stands belong to the first lap of their pair."""
    pair, _ = plan.stand_places
    first = np.zeros(len(pair), bool)
    for one in np.unique(pair[pair >= 0]):
        stands = np.flatnonzero(pair == one)
        first[stands[: len(plan.positions_mm)]] = True
    return first


def _difference(name: str, value: float, expected: float, se: float, dof: int) -> Check:
    p = _two_sided((value - expected) / se, dof) if se > 0 else 1.0
    return Check(name=name, value=value, expected=expected, se=se, p=p)


def _two_sided(t: float, dof: float) -> float:
    return 2 * float(stdtr(dof, -abs(t)))
