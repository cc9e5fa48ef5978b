"""Design: what a stand looks like, how long it counts, and what that costs; before visits are laid out."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import groupby

import numpy as np

from daq.estimate.contrast import contrast, epsilon_and_delta
from daq.itinerary.cost import Pattern, exposures_s, pattern_of
from daq.itinerary.dwell import (
    STEP_S,
    opening_shares,
    position_shares,
    position_worth,
    visit_dwell_s,
)
from daq.itinerary.known import Known
from daq.itinerary.moves import start_times_s
from daq.itinerary.orders import BoolArray, FloatArray, Order, blocked, cyclic, shuffled, zigzag
from daq.itinerary.search import Stand, Word, search
from daq.itinerary.wander import wander_variance

LONGEST_DWELL_S = 300.0
SEARCH_ROUNDS = 3  # word and dwell are chosen in turn


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


@dataclass(frozen=True, slots=True)
class Cost:
    """One pair: its length, and the variance of kappa that counting and the wander of the source give it."""

    total_s: float
    counting_var: float
    drift_var: float

    @property
    def time_variance(self) -> float:
        """Time x variance: what a design costs, however many pairs are made of it."""
        return self.total_s * (self.counting_var + self.drift_var)


def dwell_table_s(known: Known, design: Design) -> FloatArray:
    """Return the dwell of every visit of a forward stand, shape (positions, visits) [s]."""
    settings = known.settings
    shape = (known.places_mm.size, len(design.word))
    if settings.dwell == "equal" and known.time == "uniform" and len(design.word) == len(known.openings):
        return np.full(shape, design.dwell_s)
    total_s = _wished_s(known, design.dwell_s)
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


def pair_cost(known: Known, design: Design) -> Cost:
    """Return what one pair of a design costs and brings."""
    order = lay_out(known, design, 2, np.ones(1, bool), np.random.Generator(np.random.Philox(0)))
    dwell_s = dwell_table_s(known, design)[order.position, order.slot]
    start_s = start_times_s(dwell_s, known.moves.between_s(order, known.places_mm))
    pattern = pattern_for(known, design)
    exposure_s = exposures_s(order.position, order.opening, dwell_s, known.rates_hz.shape)
    weight = pattern.visit_weights(order.position, order.opening, dwell_s)
    return Cost(
        total_s=float(start_s[-1] + dwell_s[-1]) + known.moves.readout_s,
        counting_var=float(pattern.counting_variances(exposure_s, known.dead_time_s).sum()),
        drift_var=wander_variance(weight, start_s, dwell_s, known.wander),
    )


def searched_word(known: Known, design: Design, seed: int) -> Word:
    """Return the best order of the openings for the dwell of a design."""
    pattern, total_s = pattern_for(known, design), _wished_s(known, design.dwell_s)
    many = known.places_mm.size
    change_s = known.moves.stand_change_s(known.places_mm)
    lag_s = float(total_s.sum()) / many / 2 + change_s
    stand = Stand(
        weight=pattern.sensitivity() * known.rates_hz,
        dwell_s=total_s,
        between_s=known.moves.within_stand_s,
        still_s=float(total_s.sum()) + many * change_s,
        stands=many,
        walk_per_s=float(known.wander.structure(np.array(lag_s))) / lag_s,
        counting_var=float(pattern.counting_variances(total_s, known.dead_time_s).sum()),
    )
    settings = known.settings
    generator = np.random.Generator(np.random.Philox(seed))
    start = list(dict.fromkeys(design.slots))
    return search(stand, start, settings.repeats, settings.search_evaluations, generator)


def best_dwell_s(known: Known, design: Design) -> float:
    """Return the dwell that needs the least time for the same error bar, in steps of 0.1 s."""
    tried = {dwell_s: _time_variance(known, design, dwell_s) for dwell_s in _grid(known, 1.25)}
    near = min(tried, key=tried.__getitem__)
    for dwell_s in _steps(near / 1.25, near * 1.25, known):
        if dwell_s not in tried:
            tried[dwell_s] = _time_variance(known, design, dwell_s)
    return min(tried, key=tried.__getitem__)


def dwell_range_s(known: Known, design: Design, loss: float) -> tuple[float, float]:
    """Return the shortest and the longest dwell that cost at most so much more than the design's own."""
    limit = (1 + loss) * _time_variance(known, design, design.dwell_s)
    fine = [at for at in _grid(known, 1.1) if _time_variance(known, design, at) <= limit]
    return min([*fine, design.dwell_s]), max([*fine, design.dwell_s])


def _time_variance(known: Known, design: Design, dwell_s: float) -> float:
    return pair_cost(known, replace(design, dwell_s=dwell_s)).time_variance


def _grid(known: Known, ratio: float) -> Iterator[float]:
    """Yield dwells from the shortest gate on, each longer than the last by a ratio, in whole steps."""
    steps = max(1, int(np.ceil(known.shortest_gate_s / STEP_S - 1e-9)))
    while steps * STEP_S <= LONGEST_DWELL_S:
        yield steps / round(1 / STEP_S)
        steps = max(steps + 1, round(steps * ratio))


def _steps(low_s: float, high_s: float, known: Known) -> Iterator[float]:
    """Yield at most twenty dwells between two, in whole steps."""
    first, last = max(low_s, known.shortest_gate_s, STEP_S), high_s
    numbers = np.unique(np.round(np.linspace(first, last, 20) / STEP_S))
    yield from (float(number) / round(1 / STEP_S) for number in numbers if number >= 1)


def _wished_s(known: Known, mean_s: float) -> FloatArray:
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
