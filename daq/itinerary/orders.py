"""Orders: in which sequence openings and positions follow one another, and what a random walk costs them."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from daq import openings

IntArray = NDArray[np.int64]
FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Order:
    """Visits in order: index of the opening and of the position, stand and lap, each shape (visits,)."""

    opening: IntArray
    position: IntArray
    stand: IntArray
    lap: IntArray


def zigzag(opening_order: Sequence[int], positions: int, laps: int, forward: NDArray[np.bool_]) -> Order:
    """Return the order in which every stand runs the opening order of the stand before it reversed.

    Each second lap runs over the positions backwards, so that a pair of laps is its own mirror image and
    every odd power of time cancels about its midpoint, whatever the dwell and the (symmetric) move times.

    Parameters
    ----------
    opening_order
        Indices of the openings in the order of a forward stand.
    positions, laps
        Numbers of positions and of laps.
    forward
        Coin of each pair, shape (ceil(laps / 2),): whether its first stand runs forward.
    """
    stand = np.arange(laps * positions)
    lap = stand // positions
    within = stand % positions
    place = np.where(lap % 2 == 0, within, positions - 1 - within)
    reverse = ((stand - (lap // 2) * 2 * positions) % 2 == 1) ^ ~forward[lap // 2]
    one = np.asarray(opening_order, dtype=np.int64)
    sequence = np.where(reverse[:, None], one[::-1][None, :], one[None, :])
    many = one.size
    return Order(sequence.ravel(), np.repeat(place, many), np.repeat(stand, many), np.repeat(lap, many))


def blocked(opening_order: Sequence[int], positions: int, laps: int) -> Order:
    """Return the bad example: all laps of one opening, then all laps of the next.

    The k-th sweep of each opening is lap k; a stand is what was counted in lap k at one position.
    """
    one = np.asarray(opening_order, dtype=np.int64)
    lap = np.repeat(np.arange(laps), positions)
    within = np.tile(np.arange(positions), laps)
    place = np.where(lap % 2 == 0, within, positions - 1 - within)
    return Order(
        np.repeat(one, lap.size),
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
