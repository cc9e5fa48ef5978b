"""Sums: visits become sums by pair, position and opening."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray, IntArray, added
from daq.estimate.plan import Plan
from daq.estimate.visits import Visits, complete_pairs


@dataclass(frozen=True, slots=True)
class Sums:
    """Corrected counts, exposure (live seconds) and variance of the counts by pair, position, opening.

    Complete pairs only, (pairs, J, K); `going_on` holds what the incomplete ones have so far, as one block.
    The numbers of stands (and of the visits in those used) are of everything done so far.
    """

    value: FloatArray
    live: FloatArray
    variance: FloatArray
    visits: int = 0
    stands_used: int = 0
    stands_left_out: int = 0
    going_on: Sums | None = None


@dataclass(frozen=True, slots=True)
class Taking:
    """How visits (V) are taken into sums.

    `visits`: which; `strength` of the source, by which the live time is multiplied; `strength_var`: the
    relative variance that knowing it adds to a value.
    """

    visits: BoolArray
    strength: FloatArray
    strength_var: FloatArray


def plainly(visits: Visits, plan: Plan, stands: BoolArray | None = None) -> Taking:
    """Return the taking of whole stands (those used, or those given), the source as steady."""
    taken = visits.used if stands is None else stands
    number = len(visits.value)
    return Taking(taken[plan.stand] & (plan.stand >= 0), np.ones(number), np.zeros(number))


def sums_of(visits: Visits, plan: Plan, taking: Taking | None = None) -> Sums:
    """Return sums over what is taken (the stands used), complete pairs apart from the rest."""
    taking = plainly(visits, plan) if taking is None else taking
    pair, _ = plan.stand_places
    complete = complete_pairs(visits, plan)
    block = np.full(int(pair.max(initial=-1)) + 2, -1)  # the last entry: stands of no pair
    block[complete] = np.arange(len(complete))
    place = np.where(visits.done, block[pair], -1)[plan.stand]
    rest = _blocks(visits, plan, taking, np.where(place < 0, 0, -1), 1)
    used = int(visits.used.sum())
    return Sums(
        *_blocks(visits, plan, taking, place, len(complete)),
        visits=used * plan.whole_stand,
        stands_used=used,
        stands_left_out=int(visits.done.sum()) - used,
        going_on=Sums(*rest) if rest[1].any() else None,
    )


def _blocks(
    visits: Visits, plan: Plan, taking: Taking, block: IntArray, blocks: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return value, exposure and variance of what is taken, by block (-1: in none), position and opening."""
    chosen = taking.visits & (block >= 0)
    shape = (blocks, len(plan.positions_mm), len(plan.openings))
    cell = (block[chosen] * shape[1] + plan.position[chosen]) * shape[2] + plan.opening[chosen]
    value, live = visits.value[chosen], visits.live[chosen] * taking.strength[chosen]
    variance = visits.variance[chosen] + value**2 * taking.strength_var[chosen]
    cells = blocks * shape[1] * shape[2]
    one, two, three = (added(cell, numbers, cells).reshape(shape) for numbers in (value, live, variance))
    return one, two, three
