"""Roll-over: what a totaliser counted between two looks, though it starts anew at 2**bits."""

from __future__ import annotations


def counted_between(before: int, after: int, bits: int) -> int:
    """Return the counts between two readings of a totaliser that rolls over at 2**bits, at most once.

    Raises
    ------
    ValueError
        For a reading that the totaliser cannot show.
    """
    size = 1 << bits
    if not (0 <= before < size and 0 <= after < size):
        raise ValueError(f"a totaliser of {bits} bits cannot show {before if before >= size else after}")
    return (after - before) % size


def longest_s(bits: int, most_hz: float) -> float:
    """Return how long may pass between two looks so that it rolls over once at most [s]."""
    return ((1 << bits) - 1) / most_hz
