"""Regression: weighted linear least squares, with its covariance and how well it fits."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from daq.estimate.arrays import FloatArray


@dataclass(frozen=True, slots=True)
class LinearFit:
    """Coefficients (P) with their covariance as the given variances make it; chi-squared of the rest."""

    coefficients: FloatArray
    covariance: FloatArray
    chi2: float
    dof: int


def weighted_fit(columns: ArrayLike, values: ArrayLike, variances: ArrayLike) -> LinearFit:
    """Return the coefficients of columns (N, P) that fit values (N) with known variances (N) best.

    Notes
    -----
    By QR decomposition of columns scaled to unit length. Where the variances are known up to a factor only,
    the covariance times chi2/dof is the usual estimate.

    Raises
    ------
    ValueError
        If the columns cannot be told apart.
    """
    scale = 1 / np.sqrt(np.asarray(variances, float))
    design = np.asarray(columns, float) * scale[:, None]
    target = np.asarray(values, float) * scale
    length = np.sqrt(np.sum(design**2, axis=0))
    q, r = np.linalg.qr(design / np.where(length > 0, length, 1.0))
    if not np.all(np.abs(np.diag(r)) > 1e-13):
        raise ValueError("the columns of a fit cannot be told apart")
    inverse = np.linalg.inv(r) / length[:, None]
    coefficients = inverse @ (q.T @ target)
    # Once more on what is left: rounding of the first pass goes away.
    coefficients += inverse @ (q.T @ (target - design @ coefficients))
    rest = target - design @ coefficients
    return LinearFit(coefficients, inverse @ inverse.T, float(rest @ rest), len(target) - design.shape[1])
