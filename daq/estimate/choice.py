"""Choice: which estimator suits the visits of a run, and why; one rule, running and finished."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import FloatArray, IntArray, added
from daq.estimate.plan import Plan
from daq.estimate.sensitivity import Taken, spread_out, taken_visits, unbalance
from daq.estimate.sums import Taking, plainly
from daq.estimate.visits import Visits, complete_pairs

PLAIN = "plain contrast"
MONITORED = "normalised to the monitor"
JOINT = "joint fit"

MIRRORED = 0.03  # unbalance up to which the stands count as mirrored; a random order has 0.1 and more
LEFT_OUT = (
    0.05  # share of stands left out above which the joint fit, which keeps their good visits, is better
)
PAIRS_TO_JUDGE = 4  # below, the scatter of the pairs does not tell what a monitor is worth


@dataclass(frozen=True, slots=True)
class Choice:
    """An estimator and the reason for it, as a sentence; `taken` the visits of the plain contrast."""

    estimator: str
    why: str
    taken: Taken | None = None


def choose(visits: Visits, plan: Plan) -> Choice:
    """Return the estimator that suits the visits of complete pairs.

    Notes
    -----
    Mirrored stands make the plain contrast best linear unbiased under a random walk; where they are not
    mirrored, or many are left out, the joint fit is. Interleaved stands are mended by neither. A monitor is
    used where its counting noise costs less than the drift that it takes away.
    """
    taken = taken_visits(visits, plan, plainly(visits, plan).visits)
    whole = taken_visits(visits, plan, visits.good)
    if whole is None:
        return Choice(PLAIN, "there is no complete pair with times yet", taken)
    uneven, share = unbalance(visits, plan, whole), _left_out(visits, plan)
    spread = spread_out(visits, plan)
    if uneven > MIRRORED and spread:
        why = "the visits of a stand lie far apart in time, which no estimator mends: the order is at fault"
        return Choice(PLAIN, why, taken)
    if uneven > MIRRORED:
        return Choice(JOINT, f"the stands are not mirrored (unbalance {uneven:.2f})", taken)
    if taken is None or (share > LEFT_OUT and not spread):
        why = f"{100 * share:.1f} % of the stands are left out, and their good visits count"
        return Choice(JOINT, why, taken)
    why = f"the stands are mirrored and {100 * share:.1f} % of them are left out"
    return _monitored(visits, plan, taken) or Choice(PLAIN, why, taken)


def monitor_taking(visits: Visits, plan: Plan) -> Taking:
    """Return the taking of the stands used, live times scaled by the monitor over its mean in the stand.

    A stand in which the monitor was dark is taken as it is.
    """
    plain = plainly(visits, plan)
    number = np.flatnonzero(plain.visits)
    stand = plan.stand[number]
    mean = added(stand, visits.monitor[number]) / np.maximum(np.bincount(stand), 1)
    lit = np.isfinite(mean[stand])
    strength, doubt = plain.strength.copy(), plain.strength_var.copy()
    strength[number] = np.where(lit, visits.monitor[number] / mean[stand], 1.0)
    doubt[number] = np.where(lit, visits.monitor_variance[number] / visits.monitor[number] ** 2, 0.0)
    return Taking(plain.visits, strength, doubt)


def monitor_worth(visits: Visits, plan: Plan, taken: Taken) -> tuple[float, float] | None:
    """Return what a monitor costs and what it takes away, as variances of kappa; None where nobody can tell.

    Notes
    -----
    Cost: its counting noise through the weights of the visits. What it takes away: the scatter between pairs
    of the error that the monitor says the drift made, less that noise.
    """
    number = taken.visit
    lit = np.isfinite(visits.monitor[number])
    pair = plan.pair[number]
    pairs = len(np.unique(pair))
    if plan.monitor is None or pairs < PAIRS_TO_JUDGE or not lit.all():
        return None
    cost = float(np.sum(taken.weight**2 * visits.monitor_variance[number] / visits.monitor[number] ** 2))
    told = taken.weight * np.log(
        visits.monitor[number] / _stand_mean(plan.stand[number], visits.monitor[number])
    )
    by_pair = added(pair, told)[np.unique(pair)]
    return cost, float(pairs * np.var(by_pair, ddof=1)) - cost


def _monitored(visits: Visits, plan: Plan, taken: Taken) -> Choice | None:
    worth = monitor_worth(visits, plan, taken)
    if worth is None or worth[1] <= worth[0]:
        return None
    why = (
        f"the monitor's noise costs {worth[0]:.1e} of kappa's variance and takes {worth[1]:.1e} of drift away"
    )
    return Choice(MONITORED, why, taken)


def _stand_mean(stand: IntArray, values: FloatArray) -> FloatArray:
    mean = added(stand, values) / np.maximum(np.bincount(stand), 1)
    return np.asarray(mean[stand])


def _left_out(visits: Visits, plan: Plan) -> float:
    """Return the share of the stands of complete pairs that are left out."""
    stands = np.isin(plan.stand_places[0], complete_pairs(visits, plan))
    return float(1 - visits.used[stands].mean()) if stands.any() else 0.0
