"""Figures: bias, scatter and coverage of many nights, each with its simulation error."""

from __future__ import annotations

from math import sqrt
from typing import Any

import numpy as np
from scipy.stats import t as student

from daq.estimate.arrays import FloatArray


def figures(kappa: FloatArray, se: FloatArray, dof: int, counting_se: float) -> dict[str, Any]:
    """Return bias and scatter in counting standard errors, and the coverage of the t bars.

    Parameters
    ----------
    kappa, se
        By night; the true kappa is zero.
    """
    nights = len(kappa)
    sd = float(kappa.std(ddof=1))
    return {
        "nights": nights,
        "bias": float(kappa.mean()) / counting_se,
        "bias_se": sd / sqrt(nights) / counting_se,
        "sd": sd / counting_se,
        "sd_se": sd / sqrt(2 * (nights - 1)) / counting_se,
        **{
            f"coverage_{name}": float(np.mean(np.abs(kappa) <= student.ppf(0.5 + level / 2, dof) * se))
            for name, level in (("68", 0.6827), ("95", 0.95))
        },
        "coverage_95_se": sqrt(0.95 * 0.05 / nights),
    }


def within(value: float, low: float, high: float) -> bool:
    """Return whether a figure lies in a band."""
    return bool(low <= value <= high)


def against(values: FloatArray, se: FloatArray, truth: float, formula: float) -> dict[str, Any]:
    """Return bias, scatter over what was said and over a formula, each with its simulation error."""
    draws, sd, said = len(values), float(values.std(ddof=1)), float(np.sqrt(np.mean(se**2)))
    # by the fourth moment: the scatter of an exponential law is known less well than that of a normal one
    excess = float(np.mean((values - values.mean()) ** 4) / values.var() ** 2)
    known = float(np.sqrt((excess - 1) / (4 * draws)))
    return {
        "draws": draws,
        "bias": float(values.mean() - truth) / said,
        "bias_se": sd / said / float(np.sqrt(draws)),
        "over_said": sd / said,
        "over_said_se": known * sd / said,
        "over_formula": sd / formula,
        "over_formula_se": known * sd / formula,
        **({"share": sd / truth} if truth else {}),
    }
