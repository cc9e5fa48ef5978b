"""Marginal: the residual without what its slits' cuts make of it, their uncertainty in its error bar."""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.cuts import Light, Mask, patterns


@dataclass(frozen=True, slots=True)
class Marginal:
    """Kappa with the geometry accounted for, and what its error consists of.

    `weights` (J) of epsilon in kappa; `from_cuts` (J) what the measured cuts make of epsilon; `left` (J) what
    is left of epsilon after kappa and the likeliest cuts.
    """

    kappa: float
    counting_se: float
    geometry_se: float
    weights: FloatArray
    from_cuts: FloatArray
    left: FloatArray

    @property
    def se(self) -> float:
        """The standard error of counting and geometry together."""
        return sqrt(self.counting_se**2 + self.geometry_se**2)


def marginal(
    mask: Mask,
    light: Light,
    residual: FloatArray,
    epsilon: FloatArray,
    delta: FloatArray,
    variance: FloatArray,
) -> Marginal:
    """Return kappa from the signed sum by position, the uncertainty of every cut marginalised.

    Parameters
    ----------
    residual
        Sign of every opening in the signed sum (K).
    epsilon, delta, variance
        Signed sum, its divisor and its counting variance by position (J), variances above zero.

    Notes
    -----
    Generalised least squares with C = diag(variance) + T' S T, the templates T linearised at the measured
    cuts and S their variances: the same as fitting every cut beside kappa under its measurement.

    References
    ----------
    .. [1] "Guide to the expression of uncertainty in measurement", JCGM 100:2008, sect. 5 (propagation); the
       templates are derived here.
    """
    expected, slopes = patterns(mask, mask.measured, light)
    from_cuts = expected @ residual
    free = mask.uncertain
    templates = np.einsum("jkp,k->jp", slopes[..., free], residual) * mask.sigma[free]
    covariance = np.diag(variance) + templates @ templates.T
    along = np.linalg.solve(covariance, delta)
    weights = along / float(along @ delta)
    rest = epsilon - from_cuts
    kappa = float(weights @ rest)
    shift = templates.T @ np.linalg.solve(covariance, rest - kappa * delta)
    return Marginal(
        kappa,
        sqrt(float(weights**2 @ variance)),
        float(np.linalg.norm(templates.T @ weights)),
        weights,
        from_cuts,
        rest - kappa * delta - templates @ shift,
    )
