"""Openings: which slits are open together, as a name ("AB") and as a bit mask (A = 1, B = 2, C = 4)."""

from __future__ import annotations

LETTERS = "ABCDE"
NONE = "none"


def names(slits: int) -> tuple[str, ...]:
    """Return the names of all openings of a mask, in binary order.

    Parameters
    ----------
    slits
        Number of slits, two to five.

    Raises
    ------
    ValueError
        For fewer than two or more than five slits.
    """
    if not 2 <= slits <= len(LETTERS):
        raise ValueError(f"a mask has two to five slits, not {slits}")
    return tuple(name(mask) for mask in range(1 << slits))


def name(mask: int) -> str:
    """Return the name of an opening, 3 -> "AB"; 0 -> "none"."""
    return "".join(letter for bit, letter in enumerate(LETTERS) if mask >> bit & 1) or NONE


def mask(opening: str) -> int:
    """Return the bit mask of an opening, "AB" -> 3; "none" -> 0.

    Raises
    ------
    ValueError
        For a name that is not written in order ("BA") or holds another letter.
    """
    bits = 0 if opening == NONE else sum(1 << LETTERS.index(letter) for letter in opening)
    if name(bits) != opening:
        raise ValueError(f"{opening!r} is not an opening; write its slits in order, like 'AB', or 'none'")
    return bits


def sign(opening: str, slits: int) -> int:
    """Return the sign of an opening in the residual of highest order, (-1)^(slits - open slits)."""
    return -1 if (slits - mask(opening).bit_count()) % 2 else 1
