"""Verdicts: how what was found stands to what is allowed, and to chance."""

from __future__ import annotations

from typing import Literal

from scipy.stats import chi2 as chi2_distribution

Verdict = Literal["pass", "doubtful", "fail"]
ODD_P = 1e-3  # a fit less probable than this is doubtful


def within(value: float, se: float, limit: float) -> Verdict:
    """Return how a value stands to the limit that it must not pass; nearer than its error is doubtful."""
    if value + se <= limit:
        return "pass"
    return "doubtful" if value - se <= limit else "fail"


def worst(*verdicts: Verdict) -> Verdict:
    """Return the worst of several verdicts."""
    return max(verdicts, key=("pass", "doubtful", "fail").index)


def fits(chi2: float, dof: int) -> Verdict:
    """Return "doubtful" where chance alone is farther off less than once in a thousand."""
    return "pass" if dof < 1 or chi2_distribution.sf(chi2, dof) >= ODD_P else "doubtful"
