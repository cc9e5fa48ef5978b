"""Search: the order of the openings in a stand that costs the least time for the same error bar."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import inf

import numpy as np
from numpy.typing import NDArray

from daq.itinerary.orders import FloatArray, IntArray

CHAINS = 64  # of the annealing, side by side in one array
HEAT = (0.02, 1e-4)  # relative, first and last: orders along the mask are good, and are not to be melted
ENOUGH = 6  # prices: no more were needed for any of 1500 random stands of five openings
FAILED = 1e-9  # relative: a smaller gain than this is rounding


@dataclass(frozen=True, slots=True)
class Stand:
    """What the order of the openings within a stand has to weigh; sums over all positions of a lap.

    `weight` (J, K) what a change of the log rate during all visits of an opening does to kappa; `dwell_s`
    (J, K) their counting time; `between_s` (K, K) from gate to gate; `still_s` the time of a lap besides the
    moves between openings, of which it has one set for each of `stands`; `walk_per_s` the random walk of the
    source; `counting_var` variance of kappa from counting, of one lap.
    """

    weight: FloatArray
    dwell_s: FloatArray
    between_s: FloatArray
    still_s: float
    stands: int
    walk_per_s: float
    counting_var: float

    def lap_s(self, travel_s: FloatArray) -> FloatArray:
        """Return the length of a lap from the travel of one stand [s]."""
        return np.asarray(self.still_s + self.stands * travel_s)

    def cost(self, drift: FloatArray, travel_s: FloatArray) -> FloatArray:
        """Return time x variance of a lap, from its drift integral and the travel of one stand."""
        return np.asarray((self.counting_var + self.walk_per_s * drift) * self.lap_s(travel_s))


@dataclass(frozen=True, slots=True)
class Word:
    """The order of a forward stand: `slots`, equal parts of an opening's dwell, and what it costs.

    `exhaustive`: whether all orders were weighed; `evaluations`: how many steps.
    """

    slots: tuple[int, ...]
    cost: float
    evaluations: int
    exhaustive: bool


def search(
    stand: Stand, start: Sequence[int], repeats: int, budget: int, generator: np.random.Generator
) -> Word:
    """Return the best word found in which every opening is shown up to `repeats` times.

    Parameters
    ----------
    start
        An order of all openings that is good already: half of the exchanges begin with it.
    budget
        How many steps from one opening to the next may be weighed. Where that allows it, all orders are
        (by dynamic programming over what has been shown); else exchanges are tried at random, annealed.
    generator
        For the exchanges.
    """
    best: Word | None = None
    spent = 0
    for times in range(1, repeats + 1):
        states = float(times + 1) ** stand.weight.shape[1] * stand.weight.shape[1] ** 2
        if spent + ENOUGH * states <= budget:
            word = _all_orders(stand, times, budget - spent)
        else:
            word = _annealed(stand, start, times, (budget - spent) // (repeats + 1 - times), generator)
        spent += word.evaluations
        if best is None or word.cost < best.cost * (1 - FAILED):
            best = word
    assert best is not None
    return replace(best, evaluations=spent)


def _drift_and_travel(stand: Stand, slots: IntArray, times: int) -> tuple[FloatArray, FloatArray]:
    """Return INT (cumulated weight)^2 dt of a lap, and travel of a stand [s], for words (words, slots)."""
    step = stand.weight.T[slots] / times
    after = np.cumsum(step, axis=1)
    before = after - step
    between_s = stand.between_s[slots[:, :-1], slots[:, 1:]]
    moving = np.einsum("wi,wij->w", between_s, after[:, :-1] ** 2)
    inside = before**2 + before * after + after**2
    counting = np.einsum("wij,wij->w", stand.dwell_s.T[slots], inside) / (3 * times)
    return moving + counting, between_s.sum(axis=1)


@dataclass(frozen=True, slots=True)
class _Corner:
    """An order on the convex hull of all (drift, travel), and its time x variance."""

    slots: tuple[int, ...]
    drift: float
    travel_s: float
    cost: float


def _all_orders(stand: Stand, times: int, budget: int) -> Word:
    """Return the best of all orders.

    Notes
    -----
    Time x variance is a product of two sums over the steps of an order; the least product lies on the
    convex hull of all (drift, travel), so it is the least of drift + price x travel at the right price. That
    price is the product over the square of the time, so it lies between two bounds that any order gives;
    between their corners of the hull the others are looked for, where one could be better.
    """
    steps = _Steps.of(stand, times)
    spent = 0

    def corner(price: float) -> _Corner:
        nonlocal spent
        spent += steps.evaluations
        slots = steps.cheapest(stand, price)
        drift, travel_s = _drift_and_travel(stand, np.array([slots]), times)
        return _Corner(
            tuple(slots), float(drift[0]), float(travel_s[0]), float(stand.cost(drift, travel_s)[0])
        )

    best = corner(stand.counting_var / stand.still_s)
    if best.cost <= 0:  # none is less
        return Word(best.slots, best.cost, spent, exhaustive=True)
    ends = corner(best.cost / stand.still_s**2), corner(stand.counting_var**2 / best.cost)
    best = min(best, *ends, key=lambda one: one.cost)
    sides = [ends]
    while sides and spent + steps.evaluations <= budget:
        swift, calm = sides.pop()
        if not _could_hold_better(stand, swift, calm, best):
            continue
        price = stand.walk_per_s * (swift.drift - calm.drift) / (calm.travel_s - swift.travel_s)
        between = corner(price / stand.stands)
        best = min(best, between, key=lambda one: one.cost)
        if _lies_below(stand, between, swift, price):
            sides += [(swift, between), (between, calm)]
    return Word(best.slots, best.cost, spent, exhaustive=not sides)


def _could_hold_better(stand: Stand, swift: _Corner, calm: _Corner, best: _Corner) -> bool:
    """Return whether an order with the drift of one corner and the travel of the other would be better."""
    if calm.travel_s <= swift.travel_s or swift.drift <= calm.drift:
        return False
    least = stand.cost(np.array(calm.drift), np.array(swift.travel_s))
    return bool(least < best.cost * (1 - FAILED))


def _lies_below(stand: Stand, corner: _Corner, end: _Corner, price: float) -> bool:
    """Return whether a corner lies below the side of the hull that begins at an end."""
    here, there = (stand.walk_per_s * one.drift + price * one.travel_s for one in (corner, end))
    return here < there * (1 - FAILED)


@dataclass(frozen=True, slots=True)
class _Steps:
    """Everything a step can cost, by what has been shown before it (mixed radix: how often each opening)."""

    counts: IntArray
    radix: IntArray
    squares: FloatArray
    counting: FloatArray

    @classmethod
    def of(cls, stand: Stand, times: int) -> _Steps:
        many = stand.weight.shape[1]
        radix = (times + 1) ** np.arange(many)
        counts = np.arange((times + 1) ** many)[:, None] // radix % (times + 1)
        shown = counts / times
        gram = stand.weight.T @ stand.weight
        squares = np.einsum("sk,sk->s", shown @ gram, shown)
        counting = np.empty(shown.shape)
        for opening in range(many):
            own = (stand.weight.T * stand.dwell_s[:, opening]) @ stand.weight / times
            # inside a visit the cumulated weight C grows by w: C^2 + C w + w^2/3 on average
            counting[:, opening] = np.einsum("sk,sk->s", shown @ own, shown)
            counting[:, opening] += shown @ own[opening] / times + own[opening, opening] / (3 * times**2)
        return cls(counts, radix, squares, counting)

    @property
    def evaluations(self) -> int:
        many = len(self.radix)
        return len(self.counts) * many * many

    def cheapest(self, stand: Stand, price: float) -> list[int]:
        """Return the slots of the order of least drift + price x travel, over all orders."""
        many, top = len(self.radix), int(self.counts.max())
        price *= stand.stands
        cost = np.full(self.counts.shape, inf)
        last = np.zeros(self.counts.shape, np.int8)
        cost[self.radix, np.arange(many)] = stand.walk_per_s * self.counting[0]
        layer = self.counts.sum(axis=1)
        by_layer = np.split(np.argsort(layer, kind="stable"), np.cumsum(np.bincount(layer))[:-1])
        for shown in by_layer[1:-1]:
            squares = stand.walk_per_s * self.squares[shown, None] + price
            for opening in range(many):
                free = self.counts[shown, opening] < top
                at = shown[free]
                ways = cost[at] + squares[free] * stand.between_s[:, opening]
                choice = ways.argmin(axis=1)
                target = at + self.radix[opening]
                cost[target, opening] = ways[np.arange(len(at)), choice] + (
                    stand.walk_per_s * self.counting[at, opening]
                )
                last[target, opening] = choice
        return self._traced(cost, last)

    def _traced(self, cost: FloatArray, last: NDArray[np.int8]) -> list[int]:
        state = len(cost) - 1
        opening = int(cost[state].argmin())
        slots: list[int] = []
        while state:
            slots.append(opening)
            before = int(last[state, opening])
            state -= int(self.radix[opening])
            opening = before
        return slots[::-1]


def _annealed(
    stand: Stand, start: Sequence[int], times: int, budget: int, generator: np.random.Generator
) -> Word:
    """Return the best word that exchanges and reversals at a falling temperature have found."""
    light = _fewer_positions(stand)
    slots = generator.permuted(np.tile(np.repeat(start, times), (CHAINS, 1)), axis=1)
    slots[: CHAINS // 2] = np.repeat(start, times)
    rounds = max(1, budget // slots.size)
    cost = _costs(light, slots, times)
    best, least = slots[cost.argmin()].copy(), float(cost.min())
    place = np.arange(slots.shape[1])
    for heat in np.geomspace(*HEAT, rounds - 1):
        trial = _tried(slots, place, generator)
        new = _costs(light, trial, times)
        taken = generator.random(CHAINS) < np.exp(np.minimum((cost - new) / (cost * heat), 0.0))
        slots[taken], cost[taken] = trial[taken], new[taken]
        if cost.min() < least:
            best, least = slots[cost.argmin()].copy(), float(cost.min())
    cost = _costs(stand, best[None, :], times)
    return Word(tuple(best.tolist()), float(cost[0]), rounds * slots.size, exhaustive=False)


def _tried(slots: IntArray, place: IntArray, generator: np.random.Generator) -> IntArray:
    """Return every chain with two slots exchanged, or what lies between them reversed."""
    ends = generator.integers(0, len(place), (len(slots), 2))
    first, second = ends.min(axis=1)[:, None], ends.max(axis=1)[:, None]
    within = (place >= first) & (place <= second)
    edge = (place == first) | (place == second)
    reverse = generator.random((len(slots), 1)) < 0.5
    source = np.where(edge | (within & reverse), first + second - place, place)
    return np.take_along_axis(slots, source, axis=1)


def _costs(stand: Stand, slots: IntArray, times: int) -> FloatArray:
    return stand.cost(*_drift_and_travel(stand, slots, times))


def _fewer_positions(stand: Stand) -> Stand:
    """Return a stand with the same drift integrals over fewer, rotated positions; dwell by its mean."""
    _, size, rotated = np.linalg.svd(stand.weight, full_matrices=False)
    kept = size > 1e-6 * size[0]
    weight = size[kept, None] * rotated[kept]
    dwell_s = np.tile(stand.dwell_s.mean(axis=0), (len(weight), 1))
    return replace(stand, weight=weight, dwell_s=dwell_s)
