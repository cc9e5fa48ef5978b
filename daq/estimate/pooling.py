"""Pooling: several nights become one value, with the scatter between them looked at first."""

from __future__ import annotations

from dataclasses import dataclass
from math import inf, sqrt

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import chdtrc, fdtrc, stdtr, stdtrit

from daq.estimate.arrays import FloatArray

STEPS = 200

Interval = tuple[float, float]


@dataclass(frozen=True, slots=True, kw_only=True)
class Pooled:
    """Nights taken together.

    `value`, `se`, `dof`, `interval_95`: one kappa for all nights, Student's t. How far the nights scatter:
    `q` with `q_p` (chi-squared, as if the standard errors were known), `welch_f` with `welch_p` (which knows
    that they are estimated), `birge`, `i2`, and `tau`, the standard deviation between nights (Paule-Mandel);
    with it `random_value`, `random_se`, `random_interval_95` (t with nights - 1; None for two nights).
    """

    value: float
    se: float
    dof: float
    interval_95: Interval
    q: float
    q_p: float
    birge: float
    i2: float
    welch_f: float
    welch_p: float
    tau: float
    random_value: float
    random_se: float
    random_interval_95: Interval | None
    weights: FloatArray


@dataclass(frozen=True, slots=True)
class LeftOut:
    """A night against the mean of the others: its distance in standard errors, and how odd that is.

    `p` among so many nights (Sidak), by Student's t with the night's own and the others' degrees of freedom.
    """

    others: float
    z: float
    p: float


def leave_one_out(
    values: ArrayLike, ses: ArrayLike, dofs: ArrayLike, tau: float = 0.0
) -> tuple[LeftOut, ...]:
    """Return each night against the mean of the others.

    Parameters
    ----------
    tau
        Standard deviation between nights, where that is granted; else the nights are taken as equal.
    """
    value, se, dof = (np.asarray(column, float) for column in (values, ses, dofs))
    _check(value, se, dof)
    inverse = 1 / (se**2 + tau**2)
    found = []
    for at in range(len(value)):
        rest = np.arange(len(value)) != at
        share = inverse[rest] / inverse[rest].sum()
        others, variance = float(share @ value[rest]), float(1 / inverse[rest].sum())
        apart = se[at] ** 2 + tau**2 + variance
        spread = se[at] ** 4 / dof[at] + np.sum((share * se[rest]) ** 4 / dof[rest])
        z = float((value[at] - others) / sqrt(apart))
        freedom = float(apart**2 / spread) if spread > 0 else inf
        single = min(2 * float(stdtr(freedom, -abs(z))), 1 - 1e-15)
        found.append(LeftOut(others, z, float(-np.expm1(len(value) * np.log1p(-single)))))
    return tuple(found)


def pool(
    values: ArrayLike,
    ses: ArrayLike,
    dofs: ArrayLike,
    weights: ArrayLike | None = None,
    common: ArrayLike | None = None,
) -> Pooled:
    """Return nights taken together, with every measure of their scatter.

    Parameters
    ----------
    values, ses, dofs
        By night: kappa, its jackknife standard error, and the degrees of freedom of that.
    weights
        Fixed by counts or exposure. Without them the inverse squared standard errors, which cover less than
        they say when these are estimated from few pairs.
    common
        Columns of shared systematic loads, one row of numbers by night for each cause.

    Notes
    -----
    A shared cause moves all nights together: it widens the standard error and is invisible to `q`.

    References
    ----------
    .. [1] "On the comparison of several mean values: an alternative approach", Biometrika 38, 330 (1951).
    .. [2] "Consensus values and weighting factors", J. Res. Natl. Bur. Stand. 87, 377 (1982), `tau`.
    """
    value, se, dof = (np.asarray(column, float) for column in (values, ses, dofs))
    _check(value, se, dof)
    loads = np.zeros((0, len(value))) if common is None else np.asarray(common, float).reshape(-1, len(value))
    covariance = np.diag(se**2) + loads.T @ loads
    shares = _shares(covariance, weights)
    mean = float(shares @ value)
    variance = float(shares @ covariance @ shares)
    doubt = float(np.sum((shares * se) ** 4 / dof))
    freedom = variance**2 / doubt if doubt > 0 else inf
    tau2 = _tau2(value, se)
    random_mean, random_se = _with_tau2(value, se, tau2)
    nights = len(value)
    return Pooled(
        value=mean,
        se=sqrt(variance),
        dof=freedom,
        interval_95=_interval(mean, sqrt(variance), freedom),
        tau=sqrt(tau2),
        random_value=random_mean,
        random_se=random_se,
        random_interval_95=_interval(random_mean, random_se, nights - 1) if nights > 2 else None,
        weights=shares,
        **_scatter(value, se, dof, _q(value, covariance)),
    )


def _scatter(value: FloatArray, se: FloatArray, dof: FloatArray, q: float) -> dict[str, float]:
    free = len(value) - 1
    welch_f, welch_p = _welch(value, se, dof)
    return {
        "q": q,
        "q_p": float(chdtrc(free, q)),
        "birge": sqrt(q / free),
        "i2": max(0.0, 1 - free / q) if q > 0 else 0.0,
        "welch_f": welch_f,
        "welch_p": welch_p,
    }


def _check(value: FloatArray, se: FloatArray, dof: FloatArray) -> None:
    if len(value) < 2 or not len(value) == len(se) == len(dof):
        raise ValueError(
            "pooling needs a value, a standard error and degrees of freedom for two nights or more"
        )
    if not (np.isfinite(value).all() and np.all(se > 0) and np.all(dof > 0)):
        raise ValueError(
            "every night needs a finite value, a standard error and degrees of freedom above zero"
        )


def _shares(covariance: FloatArray, weights: ArrayLike | None) -> FloatArray:
    raw = (
        np.linalg.solve(covariance, np.ones(len(covariance)))
        if weights is None
        else np.asarray(weights, float)
    )
    return np.asarray(raw / raw.sum())


def _q(value: FloatArray, covariance: FloatArray) -> float:
    rest = value - _shares(covariance, None) @ value
    return float(rest @ np.linalg.solve(covariance, rest))


def _interval(mean: float, se: float, dof: float) -> Interval:
    half = float(stdtrit(dof, 0.975)) * se
    return mean - half, mean + half


def _welch(value: FloatArray, se: FloatArray, dof: FloatArray) -> tuple[float, float]:
    nights = len(value)
    shares = se**-2 / np.sum(se**-2)
    spread = float(np.sum((1 - shares) ** 2 / dof))
    q = _q(value, np.diag(se**2))
    f = q / (nights - 1) / (1 + 2 * (nights - 2) * spread / (nights**2 - 1))
    if spread == 0:
        return f, float(chdtrc(nights - 1, f * (nights - 1)))
    return f, float(fdtrc(nights - 1, (nights**2 - 1) / (3 * spread), f))


def _tau2(value: FloatArray, se: FloatArray) -> float:
    """Return the variance between nights that makes the weighted squares nights - 1, or zero."""
    tau2 = 0.0
    for _ in range(STEPS):
        inverse = 1 / (se**2 + tau2)
        squares = inverse * (value - inverse @ value / inverse.sum()) ** 2
        step = float((squares.sum() - (len(value) - 1)) / (squares @ inverse)) if squares.any() else 0.0
        if step <= 1e-15 * tau2:  # Newton's method from the left: the steps are positive up to rounding
            break
        tau2 += step
    return tau2


def _with_tau2(value: FloatArray, se: FloatArray, tau2: float) -> tuple[float, float]:
    inverse = 1 / (se**2 + tau2)
    return float(inverse @ value / inverse.sum()), float(inverse.sum() ** -0.5)
