"""Labels: whether the patterns of the openings are those of other openings."""

from __future__ import annotations

import numpy as np
from scipy.optimize import linear_sum_assignment

from daq.estimate.arrays import FloatArray

GAIN = 50.0  # of the log likelihood that other labels must bring
BETTER = 10.0  # and so many times less chi-squared: where no labels fit, none are accused


def taken_for(counts: FloatArray, expected: FloatArray) -> dict[int, int]:
    """Return the openings that fit the pattern of another one, opening -> the one it looks like.

    Parameters
    ----------
    counts, expected
        By position and opening (J, K); the expected ones in any unit.

    Notes
    -----
    The assignment of most likelihood, Poisson, one common strength. Openings whose expected patterns are
    equal cannot be told apart: the labels as they are win a tie.

    References
    ----------
    .. [1] Common practice: the assignment problem, solved by the Hungarian method.
    """
    mean = np.maximum(expected * (counts.sum() / expected.sum()), 1e-9)
    unlikely = mean.sum(axis=0)[None, :] - counts.T @ np.log(mean)
    misfit = np.sum((counts[:, :, None] - mean[:, None, :]) ** 2 / mean[:, None, :], axis=0)
    as_they_are = np.arange(counts.shape[1])
    _, best = linear_sum_assignment(unlikely)
    gain = float(unlikely[as_they_are, as_they_are].sum() - unlikely[as_they_are, best].sum())
    plain, fitted = (float(misfit[as_they_are, labels].sum()) for labels in (as_they_are, best))
    if gain < GAIN or plain < BETTER * fitted:
        return {}
    return {one: other for one, other in _settled(best.tolist(), mean).items() if one != other}


def _settled(best: list[int], mean: FloatArray) -> dict[int, int]:
    """Return an assignment in which an opening keeps its label where one that looks alike took it."""
    for one, other in enumerate(best):
        if one != other and np.allclose(mean[:, one], mean[:, other], rtol=1e-6):
            best[best.index(one)], best[one] = other, one
    return dict(enumerate(best))
