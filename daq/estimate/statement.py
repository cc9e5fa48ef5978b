"""Statement: what may be said when kappa is not found to differ from zero."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass
from math import ceil, floor, log10
from typing import Any

from scipy.special import stdtrit

from daq.estimate.limits import null_limit

MEDIAN_HALF = 0.6744897501960817  # of the absolute value of a standard normal number


@dataclass(frozen=True, slots=True, kw_only=True)
class Statement:
    """|kappa| < `limit` at 95 % confidence, with what belongs to it.

    `interval_90` and `interval_95` with the systematic uncertainties in, `sensitivity` the limit to expect if
    kappa is zero; `total_se` and `dof` they rest on.
    """

    limit: float
    interval_90: tuple[float, float]
    interval_95: tuple[float, float]
    sensitivity: float
    total_se: float
    dof: float

    def to_json(self) -> dict[str, Any]:
        """Return plain numbers by name."""
        return asdict(self)


def statement(
    kappa: float,
    se: float,
    dof: float,
    systematic: Sequence[tuple[float, float | None]] = (),
    whole_night: float | None = None,
) -> Statement:
    """Return what may be said of kappa.

    Parameters
    ----------
    systematic
        Uncertainties that the scatter of the pairs does not see, with degrees of freedom (None: known).
    whole_night
        Multiplier of the band that holds at every look, in place of Student's t, after an end that may have
        looked at kappa.
    """
    limit, total_se, effective = null_limit(kappa, se, dof, systematic)
    one, two = (float(stdtrit(effective, level)) for level in (0.95, 0.975))
    if whole_night is not None:
        one = two = max(whole_night, two)
        limit = abs(kappa) + one * total_se
    return Statement(
        limit=rounded_up(limit),
        interval_90=(kappa - one * total_se, kappa + one * total_se),
        interval_95=(kappa - two * total_se, kappa + two * total_se),
        sensitivity=(MEDIAN_HALF + one) * total_se,
        total_se=total_se,
        dof=effective,
    )


def rounded_up(limit: float, digits: int = 3) -> float:
    """Return a limit with so many significant digits, never below what it was."""
    if not limit > 0:
        return limit
    power = digits - 1 - floor(log10(limit))
    up = ceil(limit * 10.0**power * (1 - 1e-13))
    return float(f"{up}e{-power}")
