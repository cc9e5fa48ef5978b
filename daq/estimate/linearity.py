"""Linearity: weights that a dead time left over cannot move, and the dead time that the pattern shows."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike

from daq.estimate.arrays import BoolArray, FloatArray, IntArray
from daq.estimate.blocks import jackknife
from daq.estimate.contrast import Contrast, contrast, epsilon_and_delta
from daq.estimate.plan import Plan
from daq.estimate.regression import weighted_fit
from daq.estimate.tables import Tables, plan_contrast

DEAREST = 1.05  # factor of kappa's variance that may be paid; usual patterns ask for 1.0001 to 1.03


def marginal_weights(
    weights: FloatArray,
    rates_hz: ArrayLike,
    openings: Sequence[int] | IntArray,
    slits: int,
    dwell_s: ArrayLike | None = None,
) -> FloatArray:
    """Return position weights under which a small dead time left over moves kappa not at all.

    Parameters
    ----------
    weights
        Position weights of least variance (J), from the same expected rates (J, K).
    dwell_s
        Counting time in any common unit (J, K); the same everywhere when None.

    Notes
    -----
    A dead time t moves epsilon by t times the template -sum_S s_S P_S^2. Fitting it beside kappa by least
    squares is the same as these weights. Where that costs more than 5 % of kappa's variance (few positions)
    the weights are given back as they are.

    References
    ----------
    .. [1] Found. Phys. 42, 742 (2012) names the detector's linearity as the first systematic; the template is
       derived here.
    """
    what = contrast(tuple(map(int, openings)), slits)
    rates = np.asarray(rates_hz, float)
    _, delta = epsilon_and_delta(rates, what, "pairwise")
    variance = (rates if dwell_s is None else rates / np.asarray(dwell_s, float)) @ what.residual**2
    template = _template(rates, what)
    along = np.divide(template, variance, out=np.zeros_like(template), where=variance > 0)
    size = float(along @ template)
    if not size > 0:
        return weights
    fresh = weights - along * (float(weights @ template) / size)
    before, after = (
        float(np.sum(these**2 * variance)) / float(these @ delta) ** 2 if these @ delta > 0 else np.inf
        for these in (weights, fresh)
    )
    return fresh / fresh.sum() if after <= DEAREST * before and fresh.sum() > 0 else weights


def dead_time_left_s(tables: Tables, plan: Plan) -> tuple[float, float] | None:
    """Return the dead time that the pattern shows after the correction, and its jackknife standard error [s].

    None where the counts do not tell: power, fewer than three positions, fewer than two blocks.

    Notes
    -----
    Least squares of epsilon by position on delta and the template; nothing but counting is assumed of the
    weights. A counter that is linear, its dead time known, leaves zero.
    """
    seen = tables.measured
    if plan.counting == "power" or seen.sum() < 3 or tables.blocks < 2:
        return None
    try:
        whole = _fitted(tables.rates, tables.variances, seen, plan)
        parts = [
            _fitted(rates, tables.variances, seen & there, plan)
            for rates, there in zip(tables.without, tables.without_measured, strict=True)
        ]
    except (ValueError, np.linalg.LinAlgError):  # the two shapes cannot be told apart here
        return None
    return whole, jackknife(parts)[0]


def _fitted(rates: FloatArray, variances: FloatArray, seen: BoolArray, plan: Plan) -> float:
    what, signs = plan_contrast(plan)
    epsilon, delta = epsilon_and_delta(rates, what, "pairwise", signs)
    columns = np.stack([delta, _template(rates, what)], axis=-1)[seen]
    spread = (variances @ what.residual**2)[seen]
    if not np.all(spread > 0):
        raise ValueError("a position without counts has no weight")
    return float(weighted_fit(columns, epsilon[seen], spread).coefficients[1])


def _template(rates: FloatArray, what: Contrast) -> FloatArray:
    return np.asarray(-(rates**2) @ what.residual)
