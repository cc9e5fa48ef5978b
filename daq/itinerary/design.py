"""Design: what a stand looks like, how long it counts, and how its visits follow one another."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass
from itertools import groupby

import numpy as np

from daq.estimate.contrast import contrast, epsilon_and_delta
from daq.itinerary.cost import Pattern, pattern_of
from daq.itinerary.dwell import (
    opening_shares,
    position_shares,
    position_worth,
    visit_dwell_s,
)
from daq.itinerary.known import Known
from daq.itinerary.orders import BoolArray, FloatArray, Order, blocked, cyclic, shuffled, zigzag


@dataclass(frozen=True, slots=True)
class Design:
    """A stand and how stands follow one another.

    `slots` openings (indices) in order, those of one opening equal parts of its time; neighbours that are
    the same opening make one visit. `together` positions swept for one opening; `dwell_s` mean counting time
    of an opening in a stand.
    """

    slots: tuple[int, ...]
    together: int
    dwell_s: float

    @property
    def word(self) -> tuple[int, ...]:
        """The opening of each visit of a forward stand."""
        return tuple(opening for opening, _ in groupby(self.slots))

    @property
    def share(self) -> tuple[float, ...]:
        """The share of its opening's time that each visit of a forward stand gets."""
        parts = Counter(self.slots)
        return tuple(len(list(same)) / parts[opening] for opening, same in groupby(self.slots))


def dwell_table_s(known: Known, design: Design) -> FloatArray:
    """Return the dwell of every visit of a forward stand, shape (positions, visits) [s]."""
    settings = known.settings
    shape = (known.places_mm.size, len(design.word))
    if settings.dwell == "equal" and known.time == "uniform" and len(design.word) == len(known.openings):
        return np.full(shape, design.dwell_s)
    total_s = wished_s(known, design.dwell_s)
    return visit_dwell_s(total_s, design.word, design.share, known.shortest_gate_s)


def pattern_for(known: Known, design: Design) -> Pattern:
    """Return the expected pattern with position weights for the counting times of a design."""
    equal = known.settings.dwell == "equal" and known.time == "uniform"
    exposure_s = None if equal else _stand_exposure_s(known, design)
    return pattern_of(
        known.rates_hz, known.openings, known.slits, known.normalisation, known.counts, exposure_s
    )


def lay_out(
    known: Known, design: Design, laps: int, forward: BoolArray, generator: np.random.Generator
) -> Order:
    """Return the visits of a design in the order that the settings ask for."""
    settings, positions = known.settings, known.places_mm.size
    if settings.order == "blocked":
        return blocked(design.word, positions, laps)
    if settings.order == "cyclic":
        return cyclic(design.word, positions, laps)
    if settings.order == "random":
        return shuffled(design.word, positions, laps, generator)
    return zigzag(design.word, positions, laps, forward, design.together, settings.fly_back)


def wished_s(known: Known, mean_s: float) -> FloatArray:
    """Return the counting time of every opening in a stand, (positions, openings), before rounding [s]."""
    settings, many = known.settings, len(known.openings)
    by_opening = opening_shares(known.rates_hz, settings.dwell, settings.dwell_floor)
    what = contrast(tuple(map(int, known.openings)), known.slits)
    _, delta = epsilon_and_delta(known.rates_hz, what, known.normalisation)
    worth = position_worth(known.rates_hz, np.asarray(delta), by_opening)
    by_position = position_shares(worth, known.time, settings.dwell_floor)
    return mean_s * many * worth.size * by_position[:, None] * by_opening


def _stand_exposure_s(known: Known, design: Design) -> FloatArray:
    table_s = dwell_table_s(known, design)
    shown = np.zeros((len(design.word), len(known.openings)))
    shown[np.arange(len(design.word)), list(design.word)] = 1.0
    return table_s @ shown
