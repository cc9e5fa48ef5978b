"""Sums: rows become stands, stands become sums by pair, position and opening."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray, IntArray
from daq.estimate.counting import true_counts
from daq.estimate.plan import Plan, stand_places
from daq.estimate.rows import Rows, countable
from daq.estimate.use import stands_done, use
from daq.records import Quality


@dataclass(frozen=True, slots=True)
class Stands:
    """Sums by stand and opening (S, K), whether a stand is used, and whether it is done."""

    value: FloatArray
    live: FloatArray
    variance: FloatArray
    used: BoolArray
    done: BoolArray


@dataclass(frozen=True, slots=True)
class Sums:
    """Dead-time corrected counts, live seconds and variance of the counts by pair, position, opening.

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


def no_stands(plan: Plan) -> Stands:
    """Return the stands of a plan before the first visit: nothing counted, nothing done."""
    stands = len(stand_places(plan)[0])
    cells = (stands, len(plan.openings))
    value, live, variance = (np.zeros(cells) for _ in range(3))
    return Stands(value, live, variance, np.zeros(stands, bool), np.zeros(stands, bool))


def stands_of(rows: Rows, plan: Plan) -> Stands:
    """Return the stands that rows in any order make up.

    A stand with a value that no dead-time correction can take counts as overflowed: it is left out, whole.
    """
    order = np.lexsort((rows.attempt, rows.visit))
    rows = Rows(*(getattr(rows, name)[order] for name in Rows.__slots__))
    stand, opening = plan.stand[rows.visit], plan.opening[rows.visit]
    quality = np.where(countable(rows, plan), rows.quality, rows.quality | int(Quality.OVERFLOW))
    used = use(stand, rows.attempt, opening, quality, len(plan.openings))
    cells = (stand[used], opening[used])
    stands = no_stands(plan)
    live = rows.live[used]
    value, variance = true_counts(
        rows.value[used], live, rows.variance[used], plan.dead_time_s, plan.dead_time_kind
    )
    for table, numbers in ((stands.value, value), (stands.live, live), (stands.variance, variance)):
        table[cells] = numbers
    stands.used[cells[0]] = True
    stands.done[stands_done(stand, rows.attempt, opening, len(plan.openings))] = True
    return stands


def complete_pairs(stands: Stands, plan: Plan) -> IntArray:
    """Return the pairs every stand of which is done, ascending.

    A stand all of whose attempts are bad is done: it is in no sum, and holds no pair up.
    """
    pair, _ = stand_places(plan)
    done = np.bincount(pair[stands.done & (pair >= 0)], minlength=plan.planned_pairs)
    complete: IntArray = np.flatnonzero(done == plan.stands_per_pair)
    return complete


def sums_of(stands: Stands, plan: Plan) -> Sums:
    """Return sums over the stands used, complete pairs apart from the rest."""
    pair, position = stand_places(plan)
    complete = complete_pairs(stands, plan)
    block = np.full(int(pair.max(initial=-1)) + 2, -1)  # the last entry: stands of no pair
    block[complete] = np.arange(len(complete))
    place = np.where(stands.done, block[pair], -1)
    rest = _blocks(stands, plan, np.where(place < 0, 0, -1), position, 1)
    used = int(stands.used.sum())
    return Sums(
        *_blocks(stands, plan, place, position, len(complete)),
        visits=used * len(plan.openings),
        stands_used=used,
        stands_left_out=int(stands.done.sum()) - used,
        going_on=Sums(*rest) if rest[1].any() else None,
    )


def _blocks(
    stands: Stands, plan: Plan, block: IntArray, position: IntArray, blocks: int
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return value, live and variance of the used stands by block (-1: in none), position and opening."""
    chosen = stands.used & (block >= 0)
    shape = (blocks, len(plan.positions_mm), len(plan.openings))
    tables = tuple(np.zeros(shape) for _ in range(3))
    for table, numbers in zip(tables, (stands.value, stands.live, stands.variance), strict=True):
        np.add.at(table, (block[chosen], position[chosen]), numbers[chosen])
    return tables[0], tables[1], tables[2]
