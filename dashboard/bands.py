"""The two bands about kappa: what each holds, from which pair it is drawn, and which is to be read."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from daq.estimate.peeking import anytime_multiplier

INNER = "95 % only if read once, at the planned end"
OUTER = "95 % over the whole night, whatever you do"
BAND_FROM_PAIR = 6


def whole_night(kappa: Mapping[str, Any]) -> list[float] | None:
    """Return the ends of the whole-night band; None while it is undefined, and before pair 6 in any plan."""
    ends: list[float] | None = kappa["whole_night_95"] if kappa["pairs"] >= BAND_FROM_PAIR else None
    return ends


def first_band_pair(planned_pairs: int) -> int | None:
    """Return the pair from which the whole-night band is drawn; None where the plan is too short for one.

    Notes
    -----
    The multiplier of the t mixture is infinite before; no band is drawn before pair 6 in any plan.
    """
    finite = (
        n
        for n in range(BAND_FROM_PAIR, max(planned_pairs, BAND_FROM_PAIR) + 1)
        if math.isfinite(anytime_multiplier(n, planned_pairs))
    )
    return next(finite, None)


def band_to_read(feed: Mapping[str, Any]) -> str:
    """Return which band holds now: "inner" at the planned end, "outer" at any other time."""
    kappa = feed["kappa"]
    return "inner" if feed["ended"] and kappa["pairs"] >= kappa["planned_pairs"] else "outer"
