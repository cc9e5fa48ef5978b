"""Compose: from a measurement and a rig to the ordered visits of a run, with their true start times."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np

from daq import openings
from daq.description import Measurement, Rig
from daq.estimate.plan import Heralded, Plan
from daq.itinerary.cost import Pattern
from daq.itinerary.decide import MIRRORED, Decision, decide, rhythm
from daq.itinerary.design import Design, dwell_table_s, lay_out, pattern_for
from daq.itinerary.known import Known, known_of, opening_order
from daq.itinerary.moves import start_times_s
from daq.itinerary.orders import BoolArray, FloatArray, IntArray, Order
from daq.records import Visit

_SHUFFLE, _SEARCH, _PAUSE = 1, 2, 3  # streams of random numbers beside that of the coins


@dataclass(frozen=True, eq=False)  # no slots: what follows from it is worked out once
class Itinerary:
    """The ordered visits of a run.

    Arrays of shape (visits,): `opening` (bit masks), `position_mm`, `start_s`, `dwell_s`, `stand`, `lap`,
    `pair`, `forward`. For the estimate: `openings` (K,) bit masks, `positions_mm` (J,), `weights` (J,),
    `signs` "AB" -> (J,), `rates_hz` (J, K) as expected. `design` what it was composed from, `pauses`
    visit -> seconds to wait before it besides the moves, `notes` what the planner decided, and why.
    """

    opening: IntArray
    position_mm: FloatArray
    start_s: FloatArray
    dwell_s: FloatArray
    stand: IntArray
    lap: IntArray
    pair: IntArray
    forward: BoolArray
    openings: IntArray
    positions_mm: FloatArray
    slits: int
    weights: FloatArray
    signs: dict[str, FloatArray]
    rates_hz: FloatArray
    order: str
    seed: int
    total_s: float
    design: Design | None = None
    pauses: Mapping[int, float] = field(default_factory=dict)
    notes: tuple[str, ...] = ()

    def __len__(self) -> int:
        return int(self.opening.size)

    @property
    def planned_pairs(self) -> int:
        """The number of complete pairs."""
        return (int(self.lap.max()) + 1) // 2

    def ends_stand(self, number: int) -> bool:
        """Return whether a visit is the last of its stand."""
        last = number + 1 == len(self)
        return last or bool(self.stand[number + 1] != self.stand[number])

    def begins_lap(self, number: int) -> bool:
        """Return whether a visit is the first of its lap; so is what would follow the last visit."""
        return number in (0, len(self)) or bool(self.lap[number] != self.lap[number - 1])

    @cached_property
    def visits_per_stand(self) -> int:
        """How many visits a stand has."""
        return len(self) // (int(self.stand.max()) + 1)

    @cached_property
    def position_index(self) -> IntArray:
        """Where each visit's position stands in `positions_mm`, shape (visits,)."""
        by_value = np.argsort(self.positions_mm)
        return by_value[np.searchsorted(self.positions_mm, self.position_mm, sorter=by_value)]

    @property
    def opening_index(self) -> IntArray:
        """Where each visit's opening stands in `openings`, shape (visits,)."""
        return np.searchsorted(self.openings, self.opening)

    def visit(self, number: int) -> Visit:
        """Return one planned visit."""
        return Visit(
            number=number,
            opening=int(self.opening[number]),
            position_mm=float(self.position_mm[number]),
            dwell_s=float(self.dwell_s[number]),
            start_s=float(self.start_s[number]),
            stand=int(self.stand[number]),
            lap=int(self.lap[number]),
            pair=int(self.pair[number]),
            forward=bool(self.forward[number]),
            pause_s=self.pauses.get(number, 0.0),
        )


def compose(measurement: Measurement, rig: Rig, seed: int | None = None) -> Itinerary:
    """Return the itinerary of a measurement on a rig.

    Parameters
    ----------
    seed
        Draws the coin of each pair, pauses, random orders, and what a search tries; `itinerary.seed` of the
        measurement when None.

    Raises
    ------
    DescriptionError
        When no dwell keeps the stands out of step with the lines that are known.
    """
    known = known_of(measurement, rig)
    seed = known.settings.seed if seed is None else seed
    masks = known.openings.tolist()
    slots = [masks.index(openings.mask(name)) for name in opening_order(measurement, rig)]
    return laid_out(known, decide(known, slots, _stream(seed, _SEARCH)), seed)


def pinned(itinerary: Itinerary, measurement: Measurement) -> dict[str, Any]:
    """Return the table [itinerary] in which everything that was chosen is given, to the same visits."""
    design = itinerary.design
    assert design is not None
    settings = measurement.itinerary.model_dump(exclude_defaults=True)
    settings |= {"seed": itinerary.seed, "dwell_s": design.dwell_s, "together": design.together}
    if itinerary.order in MIRRORED:
        names = [openings.name(int(itinerary.openings[slot])) for slot in design.slots]
        settings |= {"order": "zigzag", "opening_order": names}
    for left_over in ("repeats", "search_evaluations"):
        settings.pop(left_over, None)
    return settings


def pattern_of_itinerary(itinerary: Itinerary, normalisation: str) -> Pattern:
    """Return the expected pattern with the weights and signs of an itinerary."""
    return Pattern(
        itinerary.openings,
        itinerary.slits,
        itinerary.rates_hz,
        itinerary.weights,
        itinerary.signs,
        normalisation,
    )


def plan_of(itinerary: Itinerary, measurement: Measurement) -> Plan:
    """Return what the estimator has to know of an itinerary."""
    settings = measurement.estimate
    complete = itinerary.pair < itinerary.planned_pairs
    return Plan(
        slits=itinerary.slits,
        openings=itinerary.openings,
        positions_mm=itinerary.positions_mm,
        weights=itinerary.weights,
        signs=itinerary.signs,
        normalisation=settings.normalisation,
        dead_time_s=settings.dead_time_s,
        dead_time_kind=settings.dead_time_kind,
        planned_pairs=itinerary.planned_pairs,
        stand=itinerary.stand,
        pair=np.where(complete, itinerary.pair, -1),
        position=itinerary.position_index,
        opening=itinerary.opening_index,
        goal_se=settings.goal_se,
        visits_per_stand=itinerary.visits_per_stand,
        counting=settings.counting,
        fano=settings.fano,
        monitor=settings.monitor_channel,
        heralded=None if settings.heralded is None else Heralded(**settings.heralded.model_dump()),
        hard_end=measurement.stop.hard_end,
    )


def laid_out(known: Known, decision: Decision, seed: int) -> Itinerary:
    """Return the visits of a decision; the seed draws coins, pauses and random orders."""
    settings, design = known.settings, decision.design
    coins = np.random.Generator(np.random.Philox(seed)).random((settings.laps + 1) // 2) < 0.5
    if settings.order not in MIRRORED:
        coins[:] = True
    order = lay_out(known, design, settings.laps, coins, _generator(seed, _SHUFFLE))
    dwell_s = dwell_table_s(known, design)[order.position, order.slot]
    pauses = _pauses(order, rhythm(known, design).pair_s / 4, seed) if decision.pauses else {}
    between_s = known.moves.between_s(order, known.places_mm)
    between_s[np.array(list(pauses), np.int64) - 1] += list(pauses.values())
    start_s = start_times_s(dwell_s, between_s)
    pattern = pattern_for(known, design)
    return Itinerary(
        opening=known.openings[order.opening],
        position_mm=known.places_mm[order.position],
        start_s=start_s,
        dwell_s=dwell_s,
        stand=order.stand,
        lap=order.lap,
        pair=order.lap // 2,
        forward=coins[order.lap // 2],
        openings=known.openings,
        positions_mm=known.places_mm,
        slits=known.slits,
        weights=pattern.weights,
        signs=dict(pattern.signs),
        rates_hz=known.rates_hz,
        order=settings.order,
        seed=seed,
        total_s=float(start_s[-1] + dwell_s[-1]),
        design=design,
        pauses=pauses,
        notes=decision.notes,
    )


def _pauses(order: Order, longest_s: float, seed: int) -> dict[int, float]:
    """Return a random pause before the first visit of each pair but the first."""
    first = np.flatnonzero(np.diff(order.lap // 2) > 0) + 1
    lengths_s = _generator(seed, _PAUSE).random(first.size) * longest_s
    return dict(zip(first.tolist(), lengths_s.tolist(), strict=True))


def _stream(seed: int, tag: int) -> int:
    """Return the seed of one stream of random numbers."""
    return int(np.random.SeedSequence((seed, tag)).generate_state(1, np.uint64)[0])


def _generator(seed: int, tag: int) -> np.random.Generator:
    return np.random.Generator(np.random.Philox(_stream(seed, tag)))
