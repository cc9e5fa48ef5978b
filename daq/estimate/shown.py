"""Shown: what of an estimate may leave the program, whatever the state of the blinding."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import fields, replace
from math import floor, isfinite, log10
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.blinding import Blinding
from daq.estimate.whole import Estimate

HIDDEN_ORDER = 3  # slits open together from which the rate of an opening is hidden
STEP = 0.1  # of a standard error: what a number is rounded to while blinded

_BARS = (
    *("kappa_se", "kappa_counting_se", "kappa_model_se", "excess", "excess_se", "forecast_se"),
    *("drift_per_sqrt_hour", "excluded_change_se", "dead_time_left_se_s"),
)
_NEVER = ("epsilon", "epsilon_se", "epsilon_counting_se", "terms")


def shown(estimate: Estimate, blinding: Blinding) -> Estimate:
    """Return what of an estimate may leave the program.

    Parameters
    ----------
    estimate
        Worked out under the veil of the same blinding.

    Notes
    -----
    While blinded: kappa and its bands, moved and rounded to a tenth of the standard error, and bars of two
    digits. Not at all: the rates of openings of three and more slits, epsilon, and every term of its own.

    """
    if not blinding.hides:
        return estimate
    numbers = {field.name: getattr(estimate, field.name) for field in fields(estimate)}
    nothing = np.full_like(estimate.epsilon_hz, np.nan)
    return replace(
        Estimate(**shown_numbers(numbers, blinding)),
        rates_hz=_without_high(estimate.rates_hz),
        rates_se_hz=_without_high(estimate.rates_se_hz),
        epsilon_hz=nothing,
        epsilon_se_hz=nothing,
    )


def shown_numbers(numbers: Mapping[str, Any], blinding: Blinding) -> dict[str, Any]:
    """Return figures of an estimate by name as they may leave the program; others pass as they are."""
    found = dict(numbers)
    if not blinding.hides:
        return found
    se = numbers.get("kappa_se")
    for name in ("kappa", "kappa_with_excluded"):
        if name in found:
            found[name] = rounded(found[name], se)
    for name in ("interval_95", "whole_night_95"):
        if found.get(name) is not None:
            found[name] = tuple(rounded(end, se) for end in found[name])
    if "dead_time_left_s" in found:
        found["dead_time_left_s"] = rounded(found["dead_time_left_s"], numbers.get("dead_time_left_se_s"))
    found |= {name: two_digits(found[name]) for name in _BARS if name in found}
    return found | {name: None for name in _NEVER if name in found}


def shown_table(table: Any, blinding: Blinding) -> Any:
    """Return lists and numbers by name as they may leave the program: two digits of each while blinded."""
    if not blinding.hides:
        return table
    if isinstance(table, Mapping):
        return {key: shown_table(inner, blinding) for key, inner in table.items()}
    if isinstance(table, (list, tuple)):
        return [shown_table(inner, blinding) for inner in table]
    return two_digits(table) if isinstance(table, float) else table


def rounded(value: float | None, se: float | None) -> float | None:
    """Return a number rounded to a tenth of its standard error; None where that is not known."""
    bar = two_digits(se)
    if value is None or not bar or not isfinite(value):
        return None
    step = STEP * bar
    return round(round(value / step) * step, 3 - floor(log10(step)))


def two_digits(bar: float | None) -> float | None:
    """Return a standard error with two significant digits."""
    return None if bar is None or not isfinite(bar) else float(f"{bar:.1e}")


def _without_high(rates: FloatArray) -> FloatArray:
    high = [mask.bit_count() >= HIDDEN_ORDER for mask in range(rates.shape[-1])]
    return np.where(high, np.nan, rates)
