"""Orders: in which sequence openings and positions follow one another, and what a random walk costs them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from daq import openings

IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Order:
    """Visits in order, arrays of shape (visits,).

    `opening` is an index into the openings, `slot` the place in a forward stand, `position` an index into the
    positions; `stand` all visits of one lap at one position, `lap` a sweep over all positions.
    """

    opening: IntArray
    slot: IntArray
    position: IntArray
    stand: IntArray
    lap: IntArray


def zigzag(
    word: Sequence[int],
    positions: int,
    laps: int,
    forward: BoolArray,
    together: int = 1,
    fly_back: bool = False,
) -> Order:
    """Return the order in which every stand runs the opening order of the stand before it reversed.

    The second lap of a pair runs the first one backwards, so that a pair is its own mirror image and every
    odd power of time cancels about its midpoint, whatever the dwell and the (symmetric) move times.

    Parameters
    ----------
    word
        Indices of the openings in the order of a forward stand, each at least once.
    positions, laps
        Numbers of positions and of laps.
    forward
        Coin of each pair, shape (ceil(laps / 2),): whether its first stand runs forward.
    together
        How many neighbouring positions are swept for one opening before the next one is shown.
    fly_back
        The second lap begins at the first position again. Each stand then runs the other way round than in
        the first lap, whether or not the number of positions is even: a linear drift still cancels.
    """
    slot, position, group = _one_lap(len(word), positions, together)
    back = np.lexsort((-np.arange(slot.size), group)) if fly_back else np.arange(slot.size)[::-1]
    slot, position = np.concatenate([slot, slot[back]]), np.concatenate([position, position[back]])
    slots = np.where(forward[:, None], slot, len(word) - 1 - slot).ravel()
    visits = laps * positions * len(word)
    return _order(word, slots[:visits], np.tile(position, forward.size)[:visits], positions, laps, fly_back)


def cyclic(word: Sequence[int], positions: int, laps: int) -> Order:
    """Return the order in which every stand runs the same way: the mask flies back, a drift stays in."""
    stands = laps * positions
    slot = np.tile(np.arange(len(word)), stands)
    return _order(word, slot, _there_and_back(positions, laps, len(word)), positions, laps)


def shuffled(word: Sequence[int], positions: int, laps: int, generator: np.random.Generator) -> Order:
    """Return the order in which every stand is a new random permutation."""
    slots = np.tile(np.arange(len(word)), (laps * positions, 1))
    slot = generator.permuted(slots, axis=1).ravel()
    return _order(word, slot, _there_and_back(positions, laps, len(word)), positions, laps)


def blocked(word: Sequence[int], positions: int, laps: int) -> Order:
    """Return the bad example: all laps of one opening, then all laps of the next.

    The k-th sweep of each opening is lap k; a stand is what was counted in lap k at one position.
    """
    one = np.asarray(word, dtype=np.int64)
    lap = np.repeat(np.arange(laps), positions)
    within = np.tile(np.arange(positions), laps)
    place = np.where(lap % 2 == 0, within, positions - 1 - within)
    return Order(
        np.repeat(one, lap.size),
        np.repeat(np.arange(one.size), lap.size),
        np.tile(place, one.size),
        np.tile(lap * positions + within, one.size),
        np.tile(lap, one.size),
    )


def random_walk_cost(
    order: Sequence[str], patterns: Mapping[str, float | Sequence[float] | FloatArray]
) -> float:
    """Return the sum of squared cumulated weights of one stand: what a random walk of the source costs.

    Parameters
    ----------
    order
        The openings of one stand in order, all openings of the mask once.
    patterns
        Rate of every opening, a number or one for each position (any common unit).

    Notes
    -----
    Equal slots are assumed; the variance of kappa is this times (variance per second) times (slot) / delta^2.
    """
    slits = max(openings.mask(name) for name in order).bit_length()
    signed = [
        openings.sign(name, slits) * np.atleast_1d(np.asarray(patterns[name], dtype=float)) for name in order
    ]
    return float((np.cumsum(np.array(signed), axis=0) ** 2).sum())


def _one_lap(visits_per_stand: int, positions: int, together: int) -> tuple[IntArray, IntArray, IntArray]:
    """Return slot, position and group of the visits of a first lap; every second group runs backwards."""
    place = np.arange(positions)
    group, within = place // together, place % together
    size = np.bincount(group)[group]
    slot = np.repeat(np.arange(visits_per_stand), positions)
    sweep = np.tile(within, visits_per_stand)
    sweep = np.where(slot % 2 == 0, sweep, np.tile(size, visits_per_stand) - 1 - sweep)
    of_group, of_place = np.tile(group, visits_per_stand), np.tile(place, visits_per_stand)
    turn = np.where(of_group % 2 == 0, 1, -1)
    chosen = np.lexsort((turn * sweep, turn * slot, of_group))
    return slot[chosen], of_place[chosen], of_group[chosen]


def _there_and_back(positions: int, laps: int, visits_per_stand: int) -> IntArray:
    """Return the position of every visit of laps that run there and back."""
    lap, within = np.divmod(np.arange(laps * positions), positions)
    return np.repeat(np.where(lap % 2 == 0, within, positions - 1 - within), visits_per_stand)


def _order(
    word: Sequence[int],
    slot: IntArray,
    position: IntArray,
    positions: int,
    laps: int,
    fly_back: bool = False,
) -> Order:
    lap = np.repeat(np.arange(laps), positions * len(word))
    rank = position if fly_back else np.where(lap % 2 == 0, position, positions - 1 - position)
    return Order(np.asarray(word, dtype=np.int64)[slot], slot, position, lap * positions + rank, lap)
