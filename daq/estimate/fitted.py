"""Fitted: kappa, cuts and light from the patterns of all openings together; no better than the model."""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.cuts import Light, Mask, patterns

STEPS = 30
SETTLED = 1e-3  # of a standard error
GOOD_FIT = 3.0  # standard deviations of chi-squared over freedom


@dataclass(frozen=True, slots=True)
class Fitted:
    """Kappa with its model error, the light, and how well the model fits."""

    kappa: float
    se: float
    light: Light
    chi2: float
    dof: int

    @property
    def fits(self) -> bool:
        """Whether chi-squared over freedom passes, so that the figure may be shown."""
        return self.dof > 0 and self.chi2 / self.dof < 1 + GOOD_FIT * sqrt(2 / self.dof)


@dataclass(frozen=True, slots=True)
class _Problem:
    """Rates and variances (J, K), divisor of kappa (J) in the full opening, spread of a common level."""

    mask: Mask
    rates: FloatArray
    variances: FloatArray
    kappa_in: FloatArray
    level_sd: float

    @property
    def sizes(self) -> tuple[int, int, int]:
        """How many cuts, light and level parameters there are; kappa is one more."""
        cuts, light = len(self.mask.uncertain), 2 * self.mask.slits + len(self.mask.pairs)
        return cuts, light, len(self.rates) if self.level_sd else 0


def fitted(
    mask: Mask,
    light: Light,
    rates: FloatArray,
    variances: FloatArray,
    delta: FloatArray,
    level_sd: float = 0.0,
) -> Fitted:
    """Return the joint fit of all patterns.

    Parameters
    ----------
    light
        Where it starts from.
    delta
        Divisor of kappa by position (J): the full opening counts kappa times it beside the model.
    level_sd
        Relative spread of a level that all openings of a position have in common (a source that drifts).

    Notes
    -----
    Gauss-Newton; each cut is held by its measurement. Variances are those of the expected rates.

    Raises
    ------
    ValueError
        When the fit does not settle.
    """
    full = (mask.openings == 2**mask.slits - 1).astype(float)
    problem = _Problem(mask, rates, variances, delta[:, None] * full, level_sd)
    vector = _start(problem, light)
    for _ in range(STEPS):
        rest, design, weight, prior = _linear(problem, vector)
        normal = design.T @ (weight[:, None] * design) + np.diag(prior)
        inverse = np.linalg.inv(normal)
        step = inverse @ (design.T @ (weight * rest) - prior * vector)
        vector = vector + step
        if np.max(np.abs(step) / np.sqrt(np.diag(inverse))) < SETTLED:
            return _told(problem, vector)
    raise ValueError(f"the fit of all patterns did not settle within {STEPS} steps")


def _start(problem: _Problem, light: Light) -> FloatArray:
    cuts, _, levels = problem.sizes
    return np.concatenate([np.zeros(cuts), light.vector, [0.0], np.zeros(levels)])


def _linear(problem: _Problem, vector: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return what is left (JK), its slopes (JK, P), weights (JK) and the weight of each prior (P).

    The parameters: cuts in units of their uncertainties, about the measured ones (the light is not held, so
    its prior weighs nothing), light, kappa, levels.
    """
    mask, (cuts, light, levels) = problem.mask, problem.sizes
    free, sigma = mask.uncertain, mask.sigma
    geometry = mask.measured.copy()
    geometry[free] += sigma[free] * vector[:cuts]
    expected, slopes = patterns(mask, geometry, Light.of(vector[cuts : cuts + light], mask.slits))
    whole = expected + vector[cuts + light] * problem.kappa_in
    level = np.exp(vector[cuts + light + 1 :])[:, None] if levels else 1.0
    columns = [slopes[..., free] * sigma[free], slopes[..., len(geometry) :], problem.kappa_in[..., None]]
    design = np.concatenate(columns, axis=-1) * np.asarray(level)[..., None]
    mean = whole * level
    if levels:
        design = np.concatenate([design, np.eye(levels)[:, None, :] * mean[..., None]], axis=-1)
    each = problem.variances / np.maximum(problem.rates, 1e-300)
    weight = 1 / np.maximum(each * mean, 1e-300)
    prior = np.concatenate(
        [np.ones(cuts), np.zeros(light + 1), np.full(levels, problem.level_sd**-2 if levels else 0.0)]
    )
    size = weight.size
    return (problem.rates - mean).reshape(size), design.reshape(size, -1), weight.reshape(size), prior


def _told(problem: _Problem, vector: FloatArray) -> Fitted:
    cuts, light, _ = problem.sizes
    rest, design, weight, prior = _linear(problem, vector)
    inverse = np.linalg.inv(design.T @ (weight[:, None] * design) + np.diag(prior))
    at = cuts + light
    return Fitted(
        float(vector[at]),
        sqrt(float(inverse[at, at])),
        Light.of(vector[cuts:at], problem.mask.slits),
        float(weight @ rest**2 + prior @ vector**2),
        rest.size - light - 1 - round(float(np.sum(1 - np.diag(inverse)[at + 1 :] * prior[at + 1 :]))),
    )
