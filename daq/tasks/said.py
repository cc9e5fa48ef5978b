"""Said: how a task writes its numbers."""

from __future__ import annotations

from math import floor, isfinite, log10


def with_error(value: float, se: float) -> str:
    """Return a number and its standard error, both to the second digit of the error."""
    if not (isfinite(se) and se > 0):
        return f"{value:.4g}"
    digits = max(1 - floor(log10(se)), 0)
    return f"{value:.{digits}f} +- {se:.{digits}f}"


def of_allowed(shift: float, allowed: float) -> str:
    """Return how far something moves kappa beside what it may; next to nothing is said to be that."""
    least = 1e-3 * allowed
    return f"less than {least:.0e}" if shift < least else f"{shift:.1e} of {allowed:.1e} allowed"
