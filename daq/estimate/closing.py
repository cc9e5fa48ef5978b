"""Closing: what may be said once, when a run is over: tests of every position, and the limit of kappa."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from daq.estimate.blinding import OPEN, Blinding
from daq.estimate.dataset import plan_of_dataset, rows_of_dataset
from daq.estimate.positions import (
    FEWEST_PAIRS,
    PositionTests,
    leftover_by_pair,
    position_tests,
    sign_flips,
)
from daq.estimate.settle import settle, taking
from daq.estimate.statement import Statement, statement
from daq.estimate.stopping import ONCE
from daq.estimate.sums import sums_of
from daq.estimate.visits import visits_of
from daq.estimate.whole import Estimate


@dataclass(frozen=True, slots=True, kw_only=True)
class Closing:
    """Tests of every position (None: too few pairs), and what may be said of kappa (None: hidden, no bar)."""

    positions: PositionTests | None
    statement: Statement | None

    def to_json(self) -> dict[str, Any]:
        """Return plain numbers by name."""
        return {
            "positions": None if self.positions is None else self.positions.to_json(),
            "statement": None if self.statement is None else self.statement.to_json(),
        }


def closing_of(dataset: Any, estimate: Estimate, systematic: Sequence[float] = ()) -> Closing:
    """Return what may be said of a run that is over; nothing of it before.

    Parameters
    ----------
    dataset
        What `daq.open_visits` gives.
    estimate
        As it is shown.
    systematic
        Standard uncertainties of kappa that the scatter of the pairs does not see.
    """
    attributes: Mapping[str, Any] = dataset.attrs
    if not attributes.get("finished"):
        return Closing(positions=None, statement=None)
    return Closing(positions=_positions(dataset), statement=_statement(attributes, estimate, systematic))


def _positions(dataset: Any) -> PositionTests | None:
    plan = plan_of_dataset(dataset)
    visits = visits_of(rows_of_dataset(dataset), plan)
    sums = sums_of(visits, plan, taking(settle(visits, plan), visits, plan))
    if len(sums.value) < FEWEST_PAIRS:
        return None
    rest, variance = leftover_by_pair(sums, plan)
    if not np.any(rest):
        return None
    drawn = np.random.Generator(np.random.Philox(int(dataset.attrs.get("seed", 0))))
    return position_tests(rest, variance, plan.positions_mm, sign_flips(len(rest), drawn))


def _statement(
    attributes: Mapping[str, Any], estimate: Estimate, systematic: Sequence[float]
) -> Statement | None:
    hidden = Blinding(str(attributes.get("blinding", OPEN)))
    if hidden.hides or not estimate.printable or not estimate.kappa_se or estimate.dof is None:
        return None
    assert estimate.kappa is not None
    wide = None
    if attributes.get("stop", {}).get("band", ONCE) != ONCE:
        if estimate.whole_night_95 is None:
            return None
        wide = (estimate.whole_night_95[1] - estimate.kappa) / estimate.kappa_se
    known = [(u, None) for u in systematic if u > 0]
    return statement(estimate.kappa, estimate.kappa_se, estimate.dof, known, wide)
