"""Tests of every position over the pairs of many nights: what is too faint for one of them."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from daq.estimate import Plan
from daq.estimate.positions import (
    FEWEST_PAIRS,
    PositionTests,
    leftover_by_pair,
    position_tests,
    sign_flips,
)
from daq.scale.nights import Night

SEED = 20261201  # of the ways in which pairs are turned over: the same runs, the same p


def everywhere(nights: Sequence[Night]) -> PositionTests | None:
    """Return the tests over the pairs of all nights; None where nights differ in what they looked at.

    A hidden night keeps no sums, so it is None there too.
    """
    known = [
        (night.sums, night.plan) for night in nights if night.sums is not None and night.plan is not None
    ]
    if len(known) < len(nights) or not all(_alike(plan, known[0][1]) for _, plan in known):
        return None
    each = [leftover_by_pair(sums, plan) for sums, plan in known]
    rest = np.concatenate([leftover for leftover, _ in each])
    if len(rest) < FEWEST_PAIRS or not np.any(rest):
        return None
    variance = sum(of_mean * len(leftover) ** 2 for leftover, of_mean in each) / len(rest) ** 2
    ways = sign_flips(len(rest), np.random.Generator(np.random.Philox(SEED)))
    return position_tests(rest, np.asarray(variance), known[0][1].positions_mm, ways)


def _alike(one: Plan, other: Plan) -> bool:
    """Return whether two nights looked at the same openings and positions in the same way."""
    same = one.slits == other.slits and one.normalisation == other.normalisation
    return same and all(
        np.array_equal(getattr(one, name), getattr(other, name)) for name in ("openings", "positions_mm")
    )
