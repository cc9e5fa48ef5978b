"""Draws: random numbers that depend on what they are for, never on the order in which they are drawn."""

from __future__ import annotations

from hashlib import blake2b

import numpy as np


def generator(seed: int, use: str, number: int) -> np.random.Generator:
    """Return a generator keyed by a seed, what it is for, and a number (a gate's start, a block of steps).

    Parameters
    ----------
    seed
        The bench's seed.
    use
        A device's name, or the name of a process.
    number
        Not negative, below 2^64: the high word of the counter, so that two numbers never share a draw.

    References
    ----------
    .. [1] "Parallel random numbers: as easy as 1, 2, 3", Proc. SC11, art. 16 (2011), the Philox generator.
    """
    key = int.from_bytes(blake2b(f"{seed}/{use}".encode(), digest_size=16).digest(), "little")
    return np.random.Generator(np.random.Philox(key=key, counter=number << 192))
