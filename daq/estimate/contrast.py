"""The signed sum of all openings, what it is divided by, and how the divisor changes with each rate."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from daq import openings as names
from daq.estimate.arrays import FloatArray, IntArray

NORMALISATIONS = ("pairwise", "central")


@dataclass(frozen=True, slots=True)
class Contrast:
    """Coefficients over K openings: the residual (K), each pairwise term (P, K), and full minus none (K)."""

    residual: FloatArray
    pairs: FloatArray
    net: FloatArray
    pair_names: tuple[str, ...]


@lru_cache(maxsize=16)
def contrast(openings: tuple[int, ...], slits: int) -> Contrast:
    """Return the coefficients for openings given as bit masks.

    Raises
    ------
    ValueError
        If an opening of the mask is missing: without it the residual does not exist.
    """
    for mask, name in enumerate(names.names(slits)):
        if mask not in openings:
            raise ValueError(f"opening {name!r} is missing: the residual needs all {2**slits} openings")
    masks = np.array(openings)
    pairs = tuple(term for term in order_terms(slits) if len(term) == 2)
    full = 2**slits - 1
    return Contrast(
        coefficients(names.name(full), masks),
        np.array([coefficients(term, masks) for term in pairs]),
        (masks == full) - (masks == 0).astype(float),
        pairs,
    )


def order_terms(slits: int) -> tuple[str, ...]:
    """Return the name of every term of order two and above, in binary order, 3 -> AB, AC, BC, ABC."""
    return tuple(name for name in names.names(slits) if name != names.NONE and len(name) >= 2)


def coefficients(term: str, openings: IntArray) -> FloatArray:
    """Return the coefficients (K) of an interference term: (-1)^(|T| - |U|) for every opening U within T.

    References
    ----------
    .. [1] "Quantum mechanics as quantum measure theory", Mod. Phys. Lett. A 9, 3119 (1994), the hierarchy of
       sum rules; here the empty opening is a member, so that a background cancels.
    """
    whole = names.mask(term)
    return np.array(
        [
            0.0 if mask & ~whole else (-1.0) ** (whole.bit_count() - mask.bit_count())
            for mask in map(int, openings)
        ]
    )


def epsilon_and_delta(
    rates: FloatArray, what: Contrast, normalisation: str, signs: FloatArray | None = None
) -> tuple[FloatArray, FloatArray]:
    """Return signed sum and divisor by position, both (..., J), for rates (..., J, K).

    Parameters
    ----------
    signs
        Planned signs of the pairwise terms (J, P); without them the sign that each measured term has.
    """
    epsilon = rates @ what.residual
    if normalisation == "central":
        net = rates @ what.net
        return epsilon, np.broadcast_to(net.max(axis=-1, keepdims=True), net.shape)
    terms = rates @ what.pairs.T
    return epsilon, (np.abs(terms) if signs is None else signs * terms).sum(axis=-1)


def divisor_gradient(
    rates: FloatArray,
    weights: FloatArray,
    what: Contrast,
    normalisation: str,
    signs: FloatArray | None = None,
) -> FloatArray:
    """Return d(sum_j a_j delta_j)/d(rate), (J, K), for rates (J, K) and weights a (J)."""
    if normalisation == "central":
        gradient = np.zeros_like(rates)
        gradient[np.argmax(rates @ what.net)] = weights.sum() * what.net
        return gradient
    planned = np.sign(rates @ what.pairs.T) if signs is None else signs
    return np.asarray(weights[:, None] * (planned @ what.pairs))


def planned_signs(signs: Mapping[str, Sequence[float] | FloatArray], what: Contrast) -> FloatArray:
    """Return planned signs as an array (J, P) in the order of the pairwise terms.

    Raises
    ------
    ValueError
        If a pairwise term has no planned sign, or one that is neither +1 nor -1.
    """
    for term in what.pair_names:
        if term not in signs:
            raise ValueError(f"the planned signs lack the pairwise term {term!r}")
        if not np.all(np.abs(np.asarray(signs[term], float)) == 1):
            raise ValueError(f"a planned sign of the pairwise term {term!r} is neither +1 nor -1")
    return np.array([np.asarray(signs[term], float) for term in what.pair_names]).T
