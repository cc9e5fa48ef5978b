"""Which attempt of a stand is used: the rule, over what each visit's own record says."""

from __future__ import annotations

import numpy as np

from daq.estimate.arrays import BoolArray, IntArray
from daq.records import EXCLUDING


def use(
    stand: IntArray, attempt: IntArray, opening: IntArray, quality: IntArray, openings_per_stand: int
) -> BoolArray:
    """Return which rows are used: the stand's latest attempt that has every visit and no excluding bit.

    Parameters
    ----------
    stand, attempt, opening, quality
        By row, in any order; a row with `stand` -1 is never used. `opening` tells the visits of a stand
        apart: the number of the visit, where a stand shows an opening several times.
    openings_per_stand
        How many different ones a whole stand has.
    """
    group, stand_of, attempt_of = _attempts(stand, attempt)
    bad = np.zeros(len(stand_of), bool)
    np.logical_or.at(bad, group, (quality & int(EXCLUDING)) != 0)
    good = _whole(group, opening, len(stand_of), openings_per_stand) & ~bad & (stand_of >= 0)
    latest = np.full(int(stand.max(initial=-1)) + 2, -1, np.int64)
    np.maximum.at(latest, stand_of[good], attempt_of[good])
    used: BoolArray = (good & (attempt_of == latest[stand_of]))[group]
    return used


def held(
    stand: IntArray, attempt: IntArray, opening: IntArray, used: BoolArray, openings_per_stand: int
) -> BoolArray:
    """Return which rows speak for their stand: those used, else those of its latest whole attempt."""
    group, stand_of, attempt_of = _attempts(stand, attempt)
    whole = _whole(group, opening, len(stand_of), openings_per_stand) & (stand_of >= 0)
    settled = np.zeros(int(stand.max(initial=-1)) + 2, bool)
    settled[stand[used]] = True
    spare = whole & ~settled[stand_of]
    latest = np.full(len(settled), -1, np.int64)
    np.maximum.at(latest, stand_of[spare], attempt_of[spare])
    rows: BoolArray = used | (spare & (attempt_of == latest[stand_of]))[group]
    return rows


def stands_done(stand: IntArray, attempt: IntArray, opening: IntArray, openings_per_stand: int) -> IntArray:
    """Return the stands with at least one attempt that has every opening, good or bad, ascending."""
    group, stand_of, _ = _attempts(stand, attempt)
    whole = _whole(group, opening, len(stand_of), openings_per_stand) & (stand_of >= 0)
    done: IntArray = np.unique(stand_of[whole])
    return done


def _attempts(stand: IntArray, attempt: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Return for every row its attempt of a stand (an index), then stand and try of every such attempt."""
    tries = int(attempt.max(initial=0)) + 2
    keys, group = np.unique(stand * tries + attempt, return_inverse=True)
    return group.astype(np.int64), keys // tries, keys % tries


def _whole(group: IntArray, opening: IntArray, groups: int, openings_per_stand: int) -> BoolArray:
    """Return for every attempt whether it has every opening."""
    span = int(opening.max(initial=0)) + 2
    seen = np.unique(group * span + opening) // span
    whole: BoolArray = np.bincount(seen, minlength=groups) == openings_per_stand
    return whole
