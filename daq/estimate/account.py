"""Account: why the error bar of a run can be defended: budget, checks, and what was left out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.budget import Budget, budget, known_of
from daq.estimate.checks import Check, checks, odd_first_stands
from daq.estimate.dataset import plan_of_dataset, rows_of_dataset
from daq.estimate.plan import Plan
from daq.estimate.quality import Rules
from daq.estimate.sensitivity import taken_visits
from daq.estimate.settle import settle
from daq.estimate.sums import plainly
from daq.estimate.visits import Visits, visits_of
from daq.records import EXCLUDING, Quality

BY_COUNTS = Quality.FINGERPRINT | Quality.DISPERSION | Quality.NO_COUNTS
DOUBTFUL_BY_COUNTS, DOUBTFUL = 0.05, 0.20  # shares of the stands left out above which a person decides


@dataclass(frozen=True, slots=True, kw_only=True)
class Account:
    """Budget and checks; stands left out by rule, and whether so many are that a person has to decide.

    `first_stands_odd_mm`: positions whose first stand does not fit the later ones; it is used all the same.
    """

    budget: Budget | None
    checks: tuple[Check, ...]
    left_out: Mapping[str, int]
    doubtful: bool
    first_stands_odd_mm: tuple[float, ...]

    def to_json(self) -> dict[str, Any]:
        """Return plain lists and numbers."""
        return {
            "budget": None if self.budget is None else self.budget.to_json(),
            "checks": [asdict(check) for check in self.checks],
            "left_out": dict(self.left_out),
            "doubtful": self.doubtful,
            "first_stands_odd_mm": list(self.first_stands_odd_mm),
        }


def account_of(dataset: Any) -> Account:
    """Return the account of a run from what `daq.open_visits` gives."""
    plan = plan_of_dataset(dataset)
    visits = visits_of(rows_of_dataset(dataset), plan)
    numbers = settle(visits, plan).numbers
    taken = taken_visits(visits, plan, plainly(visits, plan).visits)
    known = known_of(dataset.attrs, _place_mm(dataset, plan))
    left_out, doubtful = _left_out(dataset, visits, plan)
    return Account(
        budget=None if taken is None else budget(visits, plan, taken, numbers, known),
        checks=() if taken is None else checks(visits, plan, taken, numbers),
        left_out=left_out,
        doubtful=doubtful,
        first_stands_odd_mm=tuple(odd_first_stands(visits, plan, Rules(**dataset.attrs.get("quality", {})))),
    )


def _place_mm(dataset: Any, plan: Plan) -> FloatArray | None:
    """Return where the detector's encoder stood during each visit, the latest attempt's; NaN: not known."""
    axes = dataset.attrs.get("axes", ())
    names = [f"encoder_{axes[-1]}_{edge}_mm" for edge in ("open", "close")] if axes else []
    if not names or any(name not in dataset for name in names):
        return None
    visit = np.asarray(dataset["visit"].values)
    order = np.argsort(np.asarray(dataset["attempt"].values), kind="stable")
    order = order[visit[order] >= 0]
    place = np.full(len(plan.stand), np.nan)
    place[visit[order]] = np.mean([np.asarray(dataset[name].values, float)[order] for name in names], axis=0)
    return place


def _left_out(dataset: Any, visits: Visits, plan: Plan) -> tuple[dict[str, int], bool]:
    """Return how many stands each rule left out (a stand may count twice), and whether that is doubtful."""
    visit, quality = (np.asarray(dataset[name].values, np.int64) for name in ("visit", "quality"))
    planned = visit >= 0
    bits = np.zeros(len(plan.stand_places[0]), np.int64)
    np.bitwise_or.at(bits, plan.stand[visit[planned]], quality[planned])
    out = visits.done & ~visits.used
    by_rule = {
        str(bit.name).lower(): int(np.count_nonzero(out & ((bits & int(bit)) != 0)))
        for bit in Quality
        if bit & EXCLUDING
    }
    by_rule["no usable number"] = int(np.count_nonzero(out & ~visits.countable))
    done = max(int(visits.done.sum()), 1)
    counted = int(np.count_nonzero(out & ((bits & int(BY_COUNTS)) != 0)))
    doubtful = counted / done > DOUBTFUL_BY_COUNTS or int(out.sum()) / done > DOUBTFUL
    return {rule: many for rule, many in by_rule.items() if many}, bool(doubtful)
