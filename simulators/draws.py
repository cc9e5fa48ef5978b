"""Draws: random numbers that depend on what they are for, never on the order in which they are drawn."""

from __future__ import annotations

from hashlib import blake2b

import numpy as np
from numpy.random.bit_generator import ISeedSequence


class _Key(ISeedSequence):
    """Hands a generator its key, which then need not ask the system for chance that it would not use."""

    def __init__(self, text: str) -> None:
        self._words = np.frombuffer(blake2b(text.encode(), digest_size=16).digest(), dtype="<u8")

    def generate_state(self, n_words: int, dtype: object = np.uint32) -> np.ndarray:
        """Return the two words of a Philox key."""
        return self._words[:n_words]


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
    counter = np.array((0, 0, 0, number), dtype=np.uint64)
    philox = np.random.Philox(_Key(f"{seed}/{use}"), counter=counter)  # type: ignore[arg-type]  # stubs too narrow
    return np.random.Generator(philox)
