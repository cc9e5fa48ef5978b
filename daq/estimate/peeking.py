"""Peeking: a band that holds at every look, and whenever the run is stopped."""

from __future__ import annotations

from functools import lru_cache
from math import exp, expm1, inf, log, pi, sqrt

from scipy.optimize import brentq
from scipy.special import ndtr, ndtri, stdtrit

STEPS = 60  # each takes a third off the interval of the search: 1e-9 in the end; the minimum is flat


@lru_cache(maxsize=4096)
def anytime_multiplier(pairs: int, planned_pairs: int, alpha: float = 0.05) -> float:
    """Return the half width of the whole-night band in standard errors; infinite while undefined.

    Parameters
    ----------
    pairs
        Complete pairs so far; the standard error has pairs - 1 degrees of freedom.
    planned_pairs
        The number at which the band is made narrowest.

    Notes
    -----
    A normal prior on the effect size with the right-Haar prior on the scale makes the Bayes factor a
    martingale, so Ville's bound holds at every pair together, with unknown variance. Exact for independent
    normal pairs of equal variance; skewed pairs break it as they break the t bar.

    References
    ----------
    .. [1] "Anytime-valid t-tests and confidence sequences for Gaussian means with unknown variance",
       Sequential Analysis, from memory; Ann. Stat. 4, 265 (1976), from memory.
    """
    if not 0 < alpha < 1:
        raise ValueError(f"alpha must lie between 0 and 1, not {alpha}")
    if pairs < 2 or planned_pairs < 2:
        return inf
    return t_mixture_multiplier(pairs, _narrowest(planned_pairs, alpha), alpha)


@lru_cache(maxsize=4096)
def hard_end_multiplier(pairs: int, planned_pairs: int, alpha: float = 0.05) -> float:
    """Return the half width, in standard errors, of the band of a run that ends at its plan whatever happens.

    Notes
    -----
    A constant boundary for the sum over the planned pairs, carried over to Student's t of the pairs so far.
    It is narrower than the band of `anytime_multiplier`, and infinite once the plan is over.
    Nearly, not exactly, at `alpha`: the scale is estimated (studies: 3.9 % at 20 pairs).

    References
    ----------
    .. [1] "An Introduction to Probability Theory and Its Applications", vol. 2, 2nd ed., ch. X.5 (the
       largest distance of a Wiener process from its start), from memory.
    """
    if not 0 < alpha < 1:
        raise ValueError(f"alpha must lie between 0 and 1, not {alpha}")
    if pairs < 2 or pairs > planned_pairs:
        return inf
    z = _boundary(alpha) * sqrt(planned_pairs / pairs)
    return -float(stdtrit(pairs - 1, ndtr(-z)))


def t_mixture_multiplier(pairs: int, prior: float, alpha: float) -> float:
    """Return the multiplier for a prior precision of the effect size (that of so many pairs)."""
    k = prior / (prior + pairs)
    excess = expm1(-log(alpha**2 * k) / pairs)
    room = 1 - k - k * excess
    return sqrt((pairs - 1) * excess / room) if room > 0 else inf


@lru_cache(maxsize=256)
def _narrowest(planned_pairs: int, alpha: float) -> float:
    """Return the prior precision that makes the multiplier smallest at the planned number of pairs."""
    # Finite only for k < alpha^(2/(n-1)): search the logarithm of the prior below that.
    most = alpha ** (2 / (planned_pairs - 1))
    high = log(planned_pairs * most / (1 - most))
    low = high - 20.0
    for _ in range(STEPS):
        third = (high - low) / 3
        left, right = (
            t_mixture_multiplier(planned_pairs, exp(at), alpha) for at in (low + third, high - third)
        )
        low, high = (low, high - third) if left < right else (low + third, high)
    return exp((low + high) / 2)


@lru_cache(maxsize=16)
def _boundary(alpha: float) -> float:
    """Return what a Wiener process on 0 .. 1 goes beyond, on either side, with probability alpha."""
    return float(brentq(lambda at: _stays_within(at) - (1 - alpha), 0.3, -ndtri(alpha / 8), xtol=1e-14))


def _stays_within(boundary: float) -> float:
    odd = range(1, 200, 2)
    terms = ((-1) ** (n // 2) / n * exp(-((pi * n) ** 2) / (8 * boundary**2)) for n in odd)
    return 4 / pi * sum(terms)
