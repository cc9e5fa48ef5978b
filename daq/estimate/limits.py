"""Limits: what may be said when nothing was found."""

from __future__ import annotations

from collections.abc import Sequence
from math import inf, sqrt

from scipy.special import stdtrit


def null_limit(
    kappa: float,
    se: float,
    dof: float,
    systematic: Sequence[tuple[float, float | None]] = (),
    confidence: float = 0.95,
) -> tuple[float, float, float]:
    """Return the limit X of "|kappa| < X", the total standard error, and its effective degrees of freedom.

    Parameters
    ----------
    systematic
        Standard uncertainties of causes that vary from run to run, each with its degrees of freedom (None:
        known, infinite). A bound shared by all runs does not belong here: add it to the limit.

    Notes
    -----
    X = |kappa| + t s: one-sided quantile of Student's t at the effective degrees of freedom. Covers in the
    worst case at the stated confidence; never below the flat-posterior interval.

    References
    ----------
    .. [1] "Guide to the expression of uncertainty in measurement", JCGM 100:2008, eq. (G.2b), effective
       degrees of freedom.
    """
    if not (se > 0 and dof > 0 and 0 < confidence < 1):
        raise ValueError("a limit needs a standard error and degrees of freedom above zero")
    parts = [(se, dof), *((u, inf if freedom is None else freedom) for u, freedom in systematic)]
    variance = sum(u**2 for u, _ in parts)
    spread = sum(u**4 / freedom for u, freedom in parts)
    effective = variance**2 / spread if spread > 0 else inf
    total = sqrt(variance)
    return abs(kappa) + float(stdtrit(effective, confidence)) * total, total, effective
