"""Terms: every interference term that the mask allows, weighted over positions, with covariances."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from scipy.special import chdtrc, fdtrc, stdtr

from daq import openings as names
from daq.estimate.arrays import BoolArray, FloatArray, IntArray
from daq.estimate.contrast import coefficients, contrast, order_terms
from daq.estimate.plan import Plan
from daq.estimate.tables import Tables, over, plan_contrast

PRINTABLE = 6.0  # kappa is printed where delta lies this many standard errors above zero


@dataclass(frozen=True, slots=True, kw_only=True)
class Term:
    """One term: weighted means `epsilon` and `delta` [1/s], and their ratio.

    `epsilon_se`, `kappa_se` from the scatter of the pairs (None below two), the `counting` ones from counts
    alone. A pairwise term is what the others are divided by: it has no kappa.
    """

    name: str
    order: int
    epsilon: float
    epsilon_se: float | None
    epsilon_counting_se: float
    delta: float
    delta_se: float
    kappa: float | None
    kappa_se: float | None
    kappa_counting_se: float | None
    printable: bool


@dataclass(frozen=True, slots=True, kw_only=True)
class Joint:
    """All terms of order three and above against zero together.

    `f`, `f_p`: Hotelling's test with the covariance that the pairs themselves give (None with too few pairs).
    `chi2`, `chi2_p`: as if counting were all. `largest` is the term farthest from zero by its own standard
    error, `largest_p` its probability among so many terms (Sidak).
    """

    dof: int
    f: float | None
    f_p: float | None
    chi2: float
    chi2_p: float
    largest: str | None
    largest_p: float | None


@dataclass(frozen=True, slots=True, kw_only=True)
class Terms:
    """Every term in binary order, the covariances of their `epsilon` [1/s^2], and the joint test."""

    terms: tuple[Term, ...]
    covariance: FloatArray | None
    counting_covariance: FloatArray
    joint: Joint | None

    def to_json(self) -> dict[str, Any]:
        """Return plain lists and numbers."""
        return {
            "terms": [asdict(term) for term in self.terms],
            "covariance": None if self.covariance is None else self.covariance.tolist(),
            "counting_covariance": self.counting_covariance.tolist(),
            "joint": None if self.joint is None else asdict(self.joint),
        }


def terms_of(tables: Tables, plan: Plan) -> Terms | None:
    """Return every term of order two and above; None while no weighted position is measured.

    References
    ----------
    .. [1] "Quantum mechanics as quantum measure theory", Mod. Phys. Lett. A 9, 3119 (1994), the hierarchy.
    """
    weights = np.where(tables.measured, plan.weights, 0.0)
    if not weights.sum() > 0:
        return None
    form = _form(tuple(map(int, plan.openings)), plan.slits)
    epsilon, delta = _means(tables.rates, weights, plan, form)
    slopes = _slopes(tables.rates, weights, plan, form)
    flat = tables.variances.ravel()
    counting = (slopes["epsilon"] * flat) @ slopes["epsilon"].T
    delta_se = np.sqrt((slopes["delta"] ** 2) @ flat)
    ratio = over(epsilon, delta, np.nan)
    gradient = slopes["epsilon"] - ratio[:, None] * slopes["delta"]
    ratio_se = over(np.sqrt(np.nan_to_num(gradient) ** 2 @ flat), delta, np.nan)
    covariance, kappa_se = _scatter(tables, plan, form)
    columns = (epsilon, _roots(covariance, len(epsilon)), np.sqrt(np.diag(counting)))
    return Terms(
        terms=tuple(
            _term(form, at, columns, (delta, delta_se), (ratio, kappa_se, ratio_se))
            for at in range(len(epsilon))
        ),
        covariance=covariance,
        counting_covariance=counting,
        joint=_joint(form, epsilon, covariance, counting, tables.blocks),
    )


@dataclass(frozen=True, slots=True)
class _Form:
    """Names; coefficients of each term (T, K); which pairwise terms are part of it (T, P); its net (T, K)."""

    names: tuple[str, ...]
    sums: FloatArray
    members: FloatArray
    net: FloatArray

    @property
    def high(self) -> BoolArray:
        """Which terms are of order three and above."""
        return np.array([len(name) > 2 for name in self.names])


@lru_cache(maxsize=16)
def _form(openings: tuple[int, ...], slits: int) -> _Form:
    what, masks = contrast(openings, slits), np.array(openings)
    every = order_terms(slits)
    return _Form(
        every,
        np.array([coefficients(name, masks) for name in every]),
        np.array([[float(set(pair) <= set(name)) for pair in what.pair_names] for name in every]),
        np.array([(masks == names.mask(name)) - (masks == 0).astype(float) for name in every]),
    )


def _means(rates: FloatArray, weights: FloatArray, plan: Plan, form: _Form) -> tuple[FloatArray, FloatArray]:
    """Return epsilon and delta of every term (..., T) for rates (..., J, K) and weights (..., J)."""
    shares = over(weights, weights.sum(axis=-1, keepdims=True))
    epsilon = (shares[..., None, :] @ rates)[..., 0, :] @ form.sums.T
    if plan.normalisation == "central":
        return epsilon, (rates @ form.net.T).max(axis=-2)
    what, signs = plan_contrast(plan)
    pairs = np.sum(shares[..., None] * signs * (rates @ what.pairs.T), axis=-2)
    return epsilon, pairs @ form.members.T


def _slopes(rates: FloatArray, weights: FloatArray, plan: Plan, form: _Form) -> Mapping[str, FloatArray]:
    """Return the derivatives of every epsilon and delta by every rate, (T, J K)."""
    shares = weights / weights.sum()
    epsilon = shares[None, :, None] * form.sums[:, None, :]
    if plan.normalisation == "central":
        peak = np.argmax(rates @ form.net.T, axis=0)
        delta = np.zeros_like(epsilon)
        delta[np.arange(len(peak)), peak] = form.net
    else:
        what, signs = plan_contrast(plan)
        by_pair = shares[:, None, None] * signs[:, :, None] * what.pairs
        delta = np.tensordot(form.members, by_pair, (1, 1))
    return {"epsilon": epsilon.reshape(len(epsilon), -1), "delta": delta.reshape(len(delta), -1)}


def _scatter(tables: Tables, plan: Plan, form: _Form) -> tuple[FloatArray | None, FloatArray | None]:
    """Return the jackknife covariance of the epsilons and the standard errors of the kappas."""
    blocks = tables.blocks
    weights = np.where(tables.without_measured, plan.weights, 0.0)
    if blocks < 2 or not np.all(weights.sum(axis=-1) > 0):
        return None, None
    epsilon, delta = _means(tables.without, weights, plan, form)
    ratio = over(epsilon, delta, np.nan)
    scale = (blocks - 1) / blocks
    apart = epsilon - epsilon.mean(axis=0)
    return scale * apart.T @ apart, np.sqrt(scale * np.sum((ratio - ratio.mean(axis=0)) ** 2, axis=0))


def _roots(covariance: FloatArray | None, terms: int) -> FloatArray:
    return np.full(terms, np.nan) if covariance is None else np.sqrt(np.diag(covariance))


def _term(
    form: _Form,
    at: int,
    epsilon: tuple[FloatArray, ...],
    delta: tuple[FloatArray, FloatArray],
    ratio: tuple[FloatArray, FloatArray | None, FloatArray],
) -> Term:
    name, high = form.names[at], bool(form.high[at])
    kappa, kappa_se, kappa_counting_se = (
        None if column is None or not high else _number(column[at]) for column in ratio
    )
    return Term(
        name=name,
        order=len(name),
        epsilon=float(epsilon[0][at]),
        epsilon_se=_number(epsilon[1][at]),
        epsilon_counting_se=float(epsilon[2][at]),
        delta=float(delta[0][at]),
        delta_se=float(delta[1][at]),
        kappa=kappa,
        kappa_se=kappa_se,
        kappa_counting_se=kappa_counting_se,
        printable=high and bool(delta[0][at] >= PRINTABLE * delta[1][at] > 0),
    )


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def _joint(
    form: _Form, epsilon: FloatArray, covariance: FloatArray | None, counting: FloatArray, blocks: int
) -> Joint | None:
    """Return the test of all terms of order three and above; None where it is not defined."""
    high = np.flatnonzero(form.high)
    if not high.size:
        return None
    chi2 = _distance(epsilon, counting, high)
    square = None if covariance is None or blocks <= high.size else _distance(epsilon, covariance, high)
    f = None if square is None else square * (blocks - high.size) / (high.size * (blocks - 1))
    f_p = None if f is None else float(fdtrc(high.size, blocks - high.size, f))
    if chi2 is None:
        return None
    return Joint(
        dof=int(high.size), f=f, f_p=f_p, chi2=chi2, chi2_p=float(chdtrc(high.size, chi2)),
        **_largest(form, epsilon, covariance, high, blocks),
    )  # fmt: skip


def _distance(epsilon: FloatArray, covariance: FloatArray, terms: IntArray) -> float | None:
    """Return the squared distance from zero in standard errors; None where the covariance is singular."""
    scale = np.sqrt(np.diag(covariance)[terms])
    if not np.all(scale > 0):
        return None
    values, vectors = np.linalg.eigh(covariance[np.ix_(terms, terms)] / np.outer(scale, scale))
    along = vectors.T @ (epsilon[terms] / scale)
    return float(np.sum(along**2 / values)) if values[0] > 1e-12 else None


def _largest(
    form: _Form, epsilon: FloatArray, covariance: FloatArray | None, high: IntArray, blocks: int
) -> dict[str, Any]:
    if covariance is None or not np.all(np.diag(covariance)[high] > 0):
        return {"largest": None, "largest_p": None}
    t = np.abs(epsilon[high]) / np.sqrt(np.diag(covariance)[high])
    at = int(np.argmax(t))
    single = min(2 * float(stdtr(blocks - 1, -t[at])), 1 - 1e-15)
    return {"largest": form.names[high[at]], "largest_p": float(-np.expm1(high.size * np.log1p(-single)))}
