"""Memory: the share of the visit before that a visit also sees, from stands there and back."""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt

import numpy as np
from scipy.stats import f as f_distribution

from daq.estimate.arrays import FloatArray, IntArray

DRIFT_POWERS = 2  # of time, in the log of the light from stand to stand


@dataclass(frozen=True, slots=True)
class Memory:
    """The share of the visit before that a visit also sees, and what is left by direction and opening."""

    share: float
    se: float
    direction: FloatArray  # log rate there less back, by opening (K,)
    direction_se: FloatArray
    p: float
    chi2: float
    dof: int


def memory(counts: FloatArray, middle_s: FloatArray, before: IntArray) -> Memory:
    """Return the memory in counts of stands there and back (S, K), taken at times (S, K).

    Parameters
    ----------
    before
        Which opening (its column) was counted before each visit (S, K).

    Notes
    -----
    n_v = r_v + beta (r_(v-1) - r_v), in shares of the stand, so that the light of a stand drops out; a steady
    drift inside stands is taken from all of them. Openings have different ones before them there and back,
    which is what tells beta from the rates. Errors grow with the root of chi2 over freedom above one.
    """
    stands, many = counts.shape
    share = _shares(counts, middle_s)
    mean = (share[::2].mean(axis=0) + share[1::2].mean(axis=0)) / 2
    weight = mean / mean.sum() * counts.sum(axis=1).mean()  # counts of a visit
    left = share / mean - 1
    also = mean[before] / mean - 1
    also = also - (also @ mean / mean.sum())[:, None]
    also = also - also.mean(axis=0)
    information = float(np.sum(weight * also**2))
    beta = float(np.sum(weight * also * left)) / information
    left = left - beta * also
    chi2, dof = float(np.sum(weight * left**2)), (stands - 1) * (many - 1) - 1
    wider = max(chi2 / dof, 1.0)
    there_less_back = left[::2].mean(axis=0) - left[1::2].mean(axis=0)
    se = np.sqrt(4 / (stands * weight) * wider)
    odd = float(np.sum((there_less_back / se) ** 2)) / (many - 2)
    p = float(f_distribution.sf(odd, many - 2, dof))
    return Memory(beta, sqrt(wider / information), there_less_back, se, p, chi2, dof)


def _shares(counts: FloatArray, middle_s: FloatArray) -> FloatArray:
    """Return the counts of every visit as a share of its stand, a smooth drift over the stands taken out."""
    time = middle_s - middle_s.mean()
    curve = np.polyfit(time.mean(axis=1), np.log(counts.sum(axis=1)), DRIFT_POWERS)
    even = counts / np.exp(np.polyval(curve, time))
    return np.asarray(even / even.sum(axis=1, keepdims=True))
