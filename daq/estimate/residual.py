"""The residual of counts, position by position or weighted over a pattern, with its standard errors."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.estimate.contrast import (
    NORMALISATIONS,
    Contrast,
    coefficients,
    contrast,
    divisor_gradient,
    epsilon_and_delta,
    order_terms,
    planned_signs,
)

# A number, or an array by position: numpy takes both, and a type checker cannot tell which one came.
Numbers: TypeAlias = Any

LARGEST_COUNT = 2.0**53  # above it neighbouring counts are the same float


@dataclass(frozen=True, slots=True)
class Residual:
    """Signed sum and divisor [1/s], their ratio, and standard errors; numbers, or arrays by position.

    `kappa` and `kappa_se` are NaN where `delta` is zero.
    """

    epsilon: Numbers
    epsilon_se: Numbers
    delta: Numbers
    kappa: Numbers
    kappa_se: Numbers


def residual(
    counts: Mapping[str, Numbers],
    live_s: Numbers | Mapping[str, Numbers],
    normalisation: str = "pairwise",
    variance: Mapping[str, Numbers] | None = None,
) -> Residual:
    """Return the residual of the highest order with first-order standard errors.

    Parameters
    ----------
    counts
        Opening -> counts (or power), a number or an array by position; all 2^n openings of 2 to 5 slits.
    live_s
        Live time [s], for all openings or opening -> live time; above zero.
    normalisation
        "pairwise": divide by the sum of the absolute pairwise terms; "central": by the rate of the fullest
        opening above `none`, at the position where it is largest.
    variance
        Opening -> variance of the value; Poisson (the counts themselves) if not given.

    Raises
    ------
    ValueError
        If an opening was never measured, or a number is out of its range; names opening and position.

    Notes
    -----
    Counts that epsilon and delta share are propagated once, with the sum of both derivatives. The sign of a
    pairwise term is taken from the data: at a zero crossing the error of delta is not linear.

    References
    ----------
    .. [1] "Ruling out multi-order interference in quantum mechanics", Science 329, 418 (2010); the
       normalisations from memory.
    """
    _check_normalisation(normalisation)
    slits = _slits(counts)
    rates, variances, shape = _rates(counts, live_s, variance, slits)
    what = contrast(tuple(range(2**slits)), slits)
    epsilon, delta = epsilon_and_delta(rates, what, normalisation)
    epsilon_se = np.sqrt(variances @ what.residual**2)
    kappa_se = np.sqrt(_kappa_variance(rates, variances, what, normalisation, delta))
    values = (epsilon, epsilon_se, delta, _ratio(epsilon, delta), kappa_se)
    return Residual(*(np.reshape(value, shape)[()] for value in values))


def kappa(
    patterns: Mapping[str, Numbers],
    variances: Mapping[str, Numbers],
    weights: Numbers,
    signs: Mapping[str, Numbers] | None = None,
    normalisation: str = "pairwise",
) -> tuple[float, float]:
    """Return kappa = sum_j a_j epsilon_j / sum_j a_j delta_j and its first-order standard error.

    Parameters
    ----------
    patterns, variances
        Opening -> rate by position [1/s], and the variance of that rate.
    weights
        Position weights a_j, fixed beforehand (not computed from the same counts).
    signs
        Pairwise term -> planned sign by position (+1 or -1); without it the measured signs.

    Raises
    ------
    ValueError
        If an opening is missing, or the weighted divisor is not above zero.
    """
    _check_normalisation(normalisation)
    slits = _slits(patterns)
    what = contrast(tuple(range(2**slits)), slits)
    rates, variance = (_table(numbers, slits) for numbers in (patterns, variances))
    planned = None if signs is None else planned_signs(signs, what)
    return weighted_kappa(
        rates, variance, np.atleast_1d(np.asarray(weights, float)), what, planned, normalisation
    )


def weighted_kappa(
    rates: FloatArray,
    variances: FloatArray,
    weights: FloatArray,
    what: Contrast,
    signs: FloatArray | None,
    normalisation: str,
) -> tuple[float, float]:
    """Return kappa and its counting standard error for tables (J, K) of rates and their variances."""
    epsilon, delta = epsilon_and_delta(rates, what, normalisation, signs)
    total = float(weights @ delta)
    if not total > 0:
        raise ValueError(
            "the weighted divisor of kappa is not above zero: give epsilon with its error instead"
        )
    value = float(weights @ epsilon) / total
    gradient = weights[:, None] * what.residual - value * divisor_gradient(
        rates, weights, what, normalisation, signs
    )
    return value, float(np.sqrt(np.sum(gradient**2 * variances))) / total


def terms(patterns: Mapping[str, Numbers], slits: int) -> dict[str, Numbers]:
    """Return every interference term of order two and above, "AB" -> P_AB - P_A - P_B + P_none.

    Parameters
    ----------
    patterns
        Opening -> rate, a number or an array by position.
    """
    names = openings.names(slits)
    _all_measured(patterns, names)
    masks = np.arange(len(names))
    return {
        term: sum(
            coefficient * np.asarray(patterns[name], float)
            for name, coefficient in zip(names, coefficients(term, masks), strict=True)
            if coefficient
        )[()]
        for term in order_terms(slits)
    }


def _check_normalisation(normalisation: str) -> None:
    if normalisation not in NORMALISATIONS:
        raise ValueError(f"normalisation must be one of {', '.join(NORMALISATIONS)}, not {normalisation!r}")


def _slits(numbers: Mapping[str, Numbers]) -> int:
    masks = [openings.mask(name) for name in numbers]
    slits = max(2, max(masks, default=0).bit_length())
    _all_measured(numbers, openings.names(slits))
    return slits


def _all_measured(numbers: Mapping[str, Numbers], names: tuple[str, ...]) -> None:
    missing = [name for name in names if name not in numbers]
    if missing:
        raise ValueError(f"opening {missing[0]!r} was never measured; the residual needs {', '.join(names)}")


def _rates(
    counts: Mapping[str, Numbers],
    live_s: Numbers | Mapping[str, Numbers],
    variance: Mapping[str, Numbers] | None,
    slits: int,
) -> tuple[FloatArray, FloatArray, tuple[int, ...]]:
    """Return rates and their variances, both (J, K), and the shape of the result."""
    live: Mapping[str, Numbers] = live_s if isinstance(live_s, Mapping) else dict.fromkeys(counts, live_s)
    _all_measured(live, openings.names(slits))
    shape = np.broadcast_shapes(*(np.shape(given[name]) for given in (counts, live) for name in counts))
    value = _table(counts, slits)
    spread = value if variance is None else _table(variance, slits)
    seconds = _table(live, slits)
    _refuse(~np.isfinite(value) | (value > LARGEST_COUNT), value, "counts are out of range")
    _refuse(~np.isfinite(spread) | (spread < 0), spread, "counts (or their variance) must not be below zero")
    _refuse(~np.isfinite(seconds) | (seconds <= 0), seconds, "live time must be above zero")
    return value / seconds, spread / seconds**2, shape


def _table(numbers: Mapping[str, Numbers], slits: int) -> FloatArray:
    """Return numbers by opening as a table (J, K)."""
    names = openings.names(slits)
    _all_measured(numbers, names)
    columns = [np.atleast_1d(np.asarray(numbers[name], float)) for name in names]
    return np.stack(np.broadcast_arrays(*columns), axis=-1)


def _refuse(wrong: FloatArray | np.ndarray[Any, Any], table: FloatArray, why: str) -> None:
    if wrong.any():
        position, opening = np.argwhere(wrong)[0]
        value = table[position, opening]
        raise ValueError(
            f"opening {openings.name(int(opening))!r} at position {position}: {why}, not {value:g}"
        )


def _ratio(over: FloatArray, under: FloatArray) -> FloatArray:
    return np.divide(over, under, out=np.full(np.shape(over), np.nan), where=under != 0)


def _kappa_variance(
    rates: FloatArray, variances: FloatArray, what: Contrast, normalisation: str, delta: FloatArray
) -> FloatArray:
    """Return the variance of kappa at every position."""
    epsilon = rates @ what.residual
    value = _ratio(epsilon, delta)
    if normalisation == "pairwise":
        own = divisor_gradient(rates, np.ones(len(rates)), what, normalisation)
        return _ratio(np.sum((what.residual - value[:, None] * own) ** 2 * variances, axis=-1), delta**2)
    peak = int(np.argmax(rates @ what.net))
    square = variances @ what.residual**2 + value**2 * (variances[peak] @ what.net**2)
    square[peak] -= 2 * value[peak] * (variances[peak] @ (what.residual * what.net))
    return _ratio(square, delta**2)
