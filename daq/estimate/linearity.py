"""Linearity: weights that a dead time left over cannot move, and the dead time that the pattern shows."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import ArrayLike

from daq.estimate.arrays import BoolArray, FloatArray, IntArray
from daq.estimate.blocks import jackknife
from daq.estimate.contrast import Contrast, contrast, epsilon_and_delta
from daq.estimate.plan import Plan
from daq.estimate.tables import Tables, plan_contrast

DEAREST = 1.05  # factor of kappa's variance that may be paid; usual patterns ask for 1.0001 to 1.03
TOLD_APART = 1e-13


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
        parts = _fitted(tables.without, tables.variances, seen & tables.without_measured, plan)
    except ValueError:  # the two shapes cannot be told apart here
        return None
    return float(whole), jackknife(parts)[0]


def _fitted(rates: FloatArray, variances: FloatArray, seen: BoolArray, plan: Plan) -> FloatArray:
    """Return the coefficient of the template for tables (..., J, K), where they were seen (..., J).

    Notes
    -----
    Of two columns the least-squares coefficient of the second is its part at right angles to the first, taken
    twice against rounding; thousands of blocks at once.
    """
    what, signs = plan_contrast(plan)
    epsilon, delta = epsilon_and_delta(rates, what, "pairwise", signs)
    spread = variances @ what.residual**2
    if not np.all((spread > 0) | ~seen):
        raise ValueError("a position without counts has no weight")
    scale = np.where(seen, 1 / np.sqrt(np.where(spread > 0, spread, 1.0)), 0.0)
    first, second, target = delta * scale, _template(rates, what) * scale, epsilon * scale
    length = np.linalg.norm(first, axis=-1, keepdims=True)
    if not np.all(length > 0):
        raise ValueError("nothing interferes: a fit has no first column")
    along = first / length
    apart = _across(_across(second, along), along)
    size = np.sum(apart**2, axis=-1)
    if not np.all(np.sqrt(size) > TOLD_APART * np.linalg.norm(second, axis=-1)):
        raise ValueError("the columns of a fit cannot be told apart")
    return np.asarray(np.sum(apart * _across(target, along), axis=-1) / size)


def _across(columns: FloatArray, along: FloatArray) -> FloatArray:
    return np.asarray(columns - along * np.sum(columns * along, axis=-1, keepdims=True))


def _template(rates: FloatArray, what: Contrast) -> FloatArray:
    return np.asarray(-(rates**2) @ what.residual)
