"""Dwell: how the counting time of a lap is shared out over openings and positions."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from daq.itinerary.orders import FloatArray

STEP_S = 0.1  # whole periods of 50 and 60 Hz: ripple of the mains averages out within a gate


def opening_shares(rates_hz: FloatArray, kind: str, floor: float) -> FloatArray:
    """Return which share of a stand's counting time each opening gets, (J, K).

    Parameters
    ----------
    kind
        "equal", or "best": in proportion to the square root of the rate, which gives the signed sum of a
        position the least variance (Neyman allocation).
    floor
        The least share, in units of the equal one.

    References
    ----------
    .. [1] "On the two different aspects of the representative method", J. R. Stat. Soc. 97, 558 (1934),
       optimum allocation, from memory.
    """
    if kind == "equal":
        return np.full(rates_hz.shape, 1 / rates_hz.shape[1])
    return _filled(np.sqrt(rates_hz), floor)


def position_shares(worth: FloatArray, kind: str, floor: float) -> FloatArray:
    """Return which share of a lap's counting time each position gets, (J,).

    Parameters
    ----------
    worth
        delta^2 over the variance of epsilon in a given time, by position.
    kind
        "uniform", or "worth": in proportion to it. The variance of kappa alone would be least with all time
        at the worthiest position; then nothing would be seen of a pattern.
    floor
        The least share, in units of the uniform one.
    """
    if kind == "uniform":
        return np.full(worth.shape, 1 / worth.size)
    return _filled(worth[None, :], floor)[0]


def position_worth(rates_hz: FloatArray, delta_hz: FloatArray, shares: FloatArray) -> FloatArray:
    """Return what a second at each position is worth: delta^2 / var(epsilon), shape (J,) [1/s]."""
    variance = (rates_hz / shares).sum(axis=1)
    return np.divide(delta_hz**2, variance, out=np.zeros_like(delta_hz), where=variance > 0)


def visit_dwell_s(
    total_s: FloatArray, word: Sequence[int], share: Sequence[float], least_s: float
) -> FloatArray:
    """Return the dwell of every visit of a forward stand in steps of 0.1 s, shape (J, visits).

    Parameters
    ----------
    total_s
        Counting time of every opening in a stand, (J, K).
    word, share
        Opening of each visit, and its share of the opening's time.
    least_s
        The shortest gate.

    Notes
    -----
    The rounding error of a visit is handed on to the next one, so that a stand keeps its length.
    """
    wanted = total_s[:, list(word)] * np.asarray(share) / STEP_S
    whole = np.round(np.cumsum(wanted, axis=1) + 1e-9)
    steps = np.diff(whole, axis=1, prepend=0.0)
    least = max(1.0, np.ceil(least_s / STEP_S - 1e-9))
    return np.asarray(np.maximum(steps, least) / round(1 / STEP_S))


def _filled(wish: FloatArray, floor: float) -> FloatArray:
    """Return shares in proportion to a wish, none below the floor, each row with sum 1."""
    many = wish.shape[1]
    least = floor / many
    low = np.zeros(wish.shape, bool)
    share = np.full(wish.shape, 1 / many)
    for _ in range(many):
        free = np.where(low, 0.0, wish)
        total = free.sum(axis=1, keepdims=True)
        left = 1 - least * low.sum(axis=1, keepdims=True)
        share = np.where(low, least, np.divide(free * left, total, out=np.zeros_like(free), where=total > 0))
        now = low | (share < least)
        if (now == low).all():
            break
        low = now
    return np.asarray(share / share.sum(axis=1, keepdims=True))
