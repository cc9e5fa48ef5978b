"""Visits: rows become one table by planned visit, with what is used of it and what is not."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, fields

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray, IntArray
from daq.estimate.detected import Detected, detected
from daq.estimate.plan import Plan
from daq.estimate.rows import Rows
from daq.estimate.use import held, stands_done, use
from daq.records import EXCLUDING, Quality

# What a rule says of a whole stand, though only one of its rows carries the bit.
OF_THE_STAND = Quality.FINGERPRINT | Quality.SENSOR


@dataclass(frozen=True, slots=True)
class Visits:
    """What every planned visit gave (V), in its stand's attempt: the one used, else the latest whole one.

    `value` corrected counts, `live` seconds, `variance` of the value, `middle_s` of the gate, `monitor` per
    live second with its variance (NaN: none), `good` whether the visit alone can be used. By stand (S):
    `used` in the sums, `done` (a whole attempt was made), `countable` (every visit gave a number).
    """

    value: FloatArray
    live: FloatArray
    variance: FloatArray
    middle_s: FloatArray
    monitor: FloatArray
    monitor_variance: FloatArray
    good: BoolArray
    used: BoolArray
    done: BoolArray
    countable: BoolArray


def no_visits(plan: Plan) -> Visits:
    """Return the visits of a plan before the first one: nothing counted, nothing done."""
    visits, stands = len(plan.stand), len(plan.stand_places[0])
    value, live, variance = np.zeros((3, visits))
    middle_s, monitor, monitor_variance = np.full((3, visits), np.nan)
    used, done, countable = np.zeros((3, stands), bool)
    good = np.zeros(visits, bool)
    return Visits(value, live, variance, middle_s, monitor, monitor_variance, good, used, done, countable)


def visits_of(rows: Rows, plan: Plan) -> Visits:
    """Return the visits that rows in any order tell of.

    A stand with a value that no correction can take counts as overflowed: it is left out, whole.
    """
    order = np.lexsort((rows.attempt, rows.visit))
    rows = Rows(*(getattr(rows, field.name)[order] for field in fields(Rows)))
    stand, found = plan.stand[rows.visit], detected(rows, plan)
    quality = np.where(found.fine, rows.quality, rows.quality | int(Quality.OVERFLOW))
    used = use(stand, rows.attempt, rows.visit, quality, plan.whole_stand)
    spoken = held(stand, rows.attempt, rows.visit, used, plan.whole_stand)
    visits = no_visits(plan)
    write(visits, rows, found, spoken, plan)
    visits.used[stand[used]] = True
    visits.done[stands_done(stand, rows.attempt, rows.visit, plan.whole_stand)] = True
    return visits


def write(visits: Visits, rows: Rows, found: Detected, chosen: BoolArray, plan: Plan) -> None:
    """Write the chosen rows, which make up whole attempts, to their visits."""
    number, quality = rows.visit[chosen], rows.quality[chosen]
    for name, column in _columns(rows, found):
        getattr(visits, name)[number] = column[chosen]
    fine, stand = found.fine[chosen], plan.stand[number]
    spoilt = np.isin(stand, stand[(quality & int(OF_THE_STAND)) != 0])
    visits.good[number] = fine & ((quality & int(EXCLUDING)) == 0) & ~spoilt
    visits.countable[stand] = True
    visits.countable[stand[~fine]] = False


def complete_pairs(visits: Visits, plan: Plan) -> IntArray:
    """Return the pairs every stand of which is done, ascending.

    A stand all of whose attempts are bad is done: it is in no sum, and holds no pair up.
    """
    pair, _ = plan.stand_places
    done = np.bincount(pair[visits.done & (pair >= 0)], minlength=plan.planned_pairs)
    complete: IntArray = np.flatnonzero(done == plan.stands_per_pair)
    return complete


def _columns(rows: Rows, found: Detected) -> Iterator[tuple[str, FloatArray]]:
    yield "value", found.value
    yield "live", np.where(found.fine, rows.live, 0.0)
    yield "variance", found.variance
    yield "middle_s", rows.middle_s
    yield "monitor", found.monitor
    yield "monitor_variance", found.monitor_variance
