"""Bars: what the scatter of the blocks says of kappa, read once and read whenever you like."""

from __future__ import annotations

from collections.abc import Mapping
from math import inf, isfinite, sqrt
from typing import Any

import numpy as np
from scipy.special import stdtrit

from daq.estimate.arrays import FloatArray
from daq.estimate.blocks import jackknife
from daq.estimate.peeking import anytime_multiplier, hard_end_multiplier

EXCESS_KNOWN = 8  # blocks from which the excess is steady enough to forecast with


def bars(
    kappa: float,
    counting: float,
    replicates: FloatArray,
    pairs: int,
    planned_pairs: int,
    hard_end: bool = False,
) -> Mapping[str, Any]:
    """Return the bars of an estimate by name; no more than a forecast below two blocks.

    Parameters
    ----------
    counting
        The standard error that counting alone gives.
    replicates
        Kappa without each block in turn; a block is a pair, or several pairs where there are very many.

    hard_end
        The run ends at its plan whatever happens, which makes the band of every look narrower.

    Notes
    -----
    The standard error assumes independent blocks. The excess is the ratio of both standard errors; its own
    error is that of a standard deviation from so many blocks. Blocks that scatter less than counting do so by
    chance, which does not last: no bar smaller than that of counting is forecast.
    """
    blocks = len(replicates)
    shrink = sqrt(pairs / planned_pairs) if planned_pairs else 1.0
    if blocks < 2 or not np.isfinite(replicates).all():
        return {"forecast_se": counting * shrink}
    se, freedom = jackknife(replicates)
    excess = se / counting if counting > 0 else None
    half = float(stdtrit(freedom, 0.975)) * se
    planned = round(planned_pairs * blocks / pairs)
    outer = (hard_end_multiplier if hard_end else anytime_multiplier)(blocks, planned) * se if se > 0 else inf
    return {
        "kappa_se": se,
        "dof": freedom,
        "interval_95": (kappa - half, kappa + half),
        "whole_night_95": (kappa - outer, kappa + outer) if isfinite(outer) else None,
        "excess": excess,
        "excess_se": None if excess is None else excess / sqrt(2 * freedom),
        "forecast_se": shrink * (max(se, counting) if blocks >= EXCESS_KNOWN else counting),
    }
