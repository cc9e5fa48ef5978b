"""Choice: what a pair of a design costs, and the order and the dwell that cost least."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from daq.itinerary.cost import exposures_s
from daq.itinerary.design import Design, dwell_table_s, lay_out, pattern_for, wished_s
from daq.itinerary.dwell import STEP_S
from daq.itinerary.known import Known
from daq.itinerary.moves import start_times_s
from daq.itinerary.orders import FloatArray, Order
from daq.itinerary.search import Stand, Word, search
from daq.itinerary.wander import wander_variance

LONGEST_DWELL_S = 300.0


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


def pair_times(known: Known, design: Design) -> tuple[Order, FloatArray, FloatArray, float]:
    """Return the visits of one pair of a design, their dwell and start, and the length of the pair [s]."""
    order = lay_out(known, design, 2, np.ones(1, bool), np.random.Generator(np.random.Philox(0)))
    dwell_s = dwell_table_s(known, design)[order.position, order.slot]
    start_s = start_times_s(dwell_s, known.moves.between_s(order, known.places_mm))
    return order, dwell_s, start_s, float(start_s[-1] + dwell_s[-1]) + known.moves.readout_s


def pair_cost(known: Known, design: Design) -> Cost:
    """Return what one pair of a design costs and brings."""
    order, dwell_s, start_s, total_s = pair_times(known, design)
    pattern = pattern_for(known, design)
    exposure_s = exposures_s(order.position, order.opening, dwell_s, known.rates_hz.shape)
    weight = pattern.visit_weights(order.position, order.opening, dwell_s)
    return Cost(
        total_s=total_s,
        counting_var=float(pattern.counting_variances(exposure_s, known.dead_time_s).sum()),
        drift_var=wander_variance(weight, start_s, dwell_s, known.wander),
    )


def searched_word(known: Known, design: Design, seed: int) -> Word:
    """Return the best order of the openings for the dwell of a design."""
    pattern, total_s = pattern_for(known, design), wished_s(known, design.dwell_s)
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
