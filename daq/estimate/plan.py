"""The plan: what the estimator knows of an itinerary."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property

import numpy as np

from daq.estimate.arrays import FloatArray, IntArray
from daq.estimate.blinding import Blinding

LAPS_PER_PAIR = 2


@dataclass(frozen=True, slots=True)
class Heralded:
    """Counts are coincidences of two channels: which ones, and the whole width of the coincidence window."""

    signal: int
    idler: int
    window_s: float


@dataclass(frozen=True)  # no slots: what follows from it is worked out once
class Plan:
    """What the estimator knows of an itinerary.

    `openings` (K) bit masks in binary order; `positions_mm`, `weights` (J); `signs` "AB" -> (J) planned sign
    of a pairwise term; `normalisation` "pairwise" or "central". The last four run over planned visits by
    number: stand, pair (-1: in no complete pair), index into `positions_mm`, index into `openings`. A stand
    shows every opening at one position, once, or as often as makes `visits_per_stand`.

    `counting` "counts" or "power" (mean power of a visit, with its variance); `fano` variance over mean of
    the counts behind the dead time; `monitor` the channel that watches the source, if any. `hard_end`: the
    run ends at its plan whatever happens; `blinding`: what is hidden of it.
    """

    slits: int
    openings: IntArray
    positions_mm: FloatArray
    weights: FloatArray
    signs: Mapping[str, FloatArray]
    normalisation: str
    dead_time_s: float
    dead_time_kind: str
    planned_pairs: int
    stand: IntArray
    pair: IntArray
    position: IntArray
    opening: IntArray
    goal_se: float | None = None
    visits_per_stand: int | None = None  # None: every opening once
    counting: str = "counts"
    fano: float = 1.0
    monitor: int | None = None
    heralded: Heralded | None = None
    hard_end: bool = False
    blinding: Blinding = field(default_factory=Blinding)

    @property
    def whole_stand(self) -> int:
        """How many visits a whole stand has."""
        return self.visits_per_stand or len(self.openings)

    @property
    def stands_per_pair(self) -> int:
        """How many stands a pair has: a lap over all positions, and its mirror."""
        return LAPS_PER_PAIR * len(self.positions_mm)

    @cached_property
    def stand_places(self) -> tuple[IntArray, IntArray]:
        """Pair and position index of every stand, by stand number; -1 for a stand without a visit."""
        stands = int(self.stand.max(initial=-1)) + 1
        pair = np.full(stands, -1, np.int64)
        position = np.full(stands, -1, np.int64)
        known = self.stand >= 0
        pair[self.stand[known]] = self.pair[known]
        position[self.stand[known]] = self.position[known]
        return pair, position
