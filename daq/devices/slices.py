"""Slices: what a counter says of the equal parts of a gate, a list of numbers with the channels together."""

from __future__ import annotations

from collections.abc import Sequence

Slices = tuple[tuple[int, ...], ...]


def whole_numbers(text: str) -> tuple[int, ...]:
    """Return the numbers of a reply, with commas between and, it may be, before them."""
    return tuple(int(part) for part in text.split(",") if part)


def in_slices(numbers: Sequence[int], channels: int) -> Slices | None:
    """Return numbers as slices of so many channels each, None when there are none.

    Raises
    ------
    ValueError
        When the last slice lacks channels.
    """
    if len(numbers) % channels:
        raise ValueError(f"{len(numbers)} numbers are no slices of {channels} channels")
    starts = range(0, len(numbers), channels)
    return tuple(tuple(numbers[start : start + channels]) for start in starts) or None


def adds_up(values: Sequence[int], slices: Slices | None) -> bool:
    """Return whether the slices of each channel add up to what it counted."""
    if slices is None:
        return True
    return tuple(map(sum, zip(*slices, strict=True))) == tuple(values)
