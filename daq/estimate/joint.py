"""Joint fit: all rates and the wandering source from all visits together, whatever their order and gaps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray, IntArray, added
from daq.estimate.walk import Walk, likeliest_per_s, walk

ALTERNATIONS = 3  # of the fit and the likeliest walk; the second changes kappa by less than 1e-3 of its error
NEWTON_STEPS = 30
SETTLED = 1e-9  # of the log rate
TOLERANCE = 1e-12  # of the conjugate gradient, relative, in the preconditioned norm
ROUGH = 1e-4, 1e-5  # both, while the walk is still looked for: its size needs no more
SOLVER_STEPS = 5000


@dataclass(frozen=True, slots=True)
class Series:
    """Visits in order of time (V).

    `cell`: opening and position as one index; `value` corrected counts or energy; `exposure` live seconds;
    `spread` variance over value of its cell; `step_s` (V - 1) from middle to middle; `block` for the
    jackknife; `start` a first guess of the log of the source's strength.
    """

    cell: IntArray
    value: FloatArray
    exposure: FloatArray
    spread: FloatArray
    step_s: FloatArray
    block: IntArray
    start: FloatArray
    cells: int


@dataclass(frozen=True, slots=True)
class Fit:
    """Rates by cell (C) at the source's mean strength, and the log of that strength by visit (V).

    `per_s`: the walk's variance per second; `work`: steps of the conjugate gradient that it took.
    """

    rates: FloatArray
    level: FloatArray
    per_s: float
    work: int


class UnsettledError(ValueError):
    """The visits do not tell rates and source apart well enough for the fit to come to rest."""


def fit(series: Series) -> Fit:
    """Return rates and source that make the visits likeliest.

    Notes
    -----
    Value of a visit: mean rate x live time x exp(level), variance `spread` times that; the level is a random
    walk. Newton's method; tridiagonal solves eliminate the levels, conjugate gradients solve for the rates on
    the Schur complement. The common factor of rates and levels is fixed hard: what is solved for is
    orthogonal to it, and the mean strength is one.

    References
    ----------
    .. [1] "Forecasting, Structural Time Series Models and the Kalman Filter", ch. 2, from memory.
    """
    level, work = series.start.copy(), 0
    per_s = 0.0
    for left in reversed(range(ALTERNATIONS)):
        mean, weights = _expected(series, level)
        seen = level + np.divide(series.value - mean, mean, out=np.zeros_like(mean), where=weights > 0)
        per_s = likeliest_per_s(weights, seen, series.step_s)
        level, steps = _settle(series, level, per_s, ROUGH if left else (SETTLED, TOLERANCE))
        work += steps
    level = level - np.log(np.sum(series.exposure * np.exp(level)) / series.exposure.sum())
    return Fit(_rates(series, level, np.ones(len(level), bool)), level, per_s, work)


def rates_without(series: Series, found: Fit, block: int) -> FloatArray:
    """Return the rates (C) with one block of visits left out: one Newton step from the whole fit."""
    kept = series.block != block
    step, _ = _step(series, found.level, found.per_s, kept)
    return _rates(series, found.level + step, kept)


def standard_error(series: Series, found: Fit, gradient: FloatArray) -> float:
    """Return the standard error of a quantity from its gradient by the log of every rate (C).

    Notes
    -----
    Counting and the walk together; where the walk is the true one this is the least possible error (hybrid
    Cramer-Rao bound). The gradient of a ratio of rates is orthogonal to their common factor.
    """
    weights = _expected(series, found.level)[1]
    schur = Schur.of(series, weights, walk(weights, series.step_s, found.per_s))
    solution, _ = schur.solve(gradient - gradient.mean())
    return float(np.sqrt(gradient @ solution))


@dataclass(frozen=True, slots=True)
class Schur:
    """What is left for the log rates without the levels: D - W (W + K)^-1 W, never written out."""

    cell: IntArray
    weights: FloatArray
    diagonal: FloatArray
    walk: Walk

    @classmethod
    def of(cls, series: Series, weights: FloatArray, matrix: Walk) -> Schur:
        """Return the complement for weights by visit."""
        return cls(series.cell, weights, added(series.cell, weights, series.cells), matrix)

    def gather(self, by_visit: FloatArray) -> FloatArray:
        """Return sums by cell."""
        return added(self.cell, by_visit, len(self.diagonal))

    def times(self, by_cell: FloatArray) -> FloatArray:
        """Return the complement times a vector by cell."""
        inner = self.walk.solve(self.weights * by_cell[self.cell])
        return np.asarray(self.diagonal * by_cell - self.gather(self.weights * inner))

    def solve(self, right: FloatArray, tolerance: float = TOLERANCE) -> tuple[FloatArray, int]:
        """Return the solution orthogonal to the common factor, and the steps that it took."""
        informed = self.diagonal > 0
        inverse = np.divide(1.0, self.diagonal, out=np.zeros_like(right), where=informed)
        total = self.diagonal.sum()
        solution, rest = np.zeros_like(right), np.where(informed, right, 0.0)
        rest -= self.diagonal * (rest.sum() / total)
        direction, size, first = np.zeros_like(right), 0.0, 0.0
        for step in range(SOLVER_STEPS):
            scaled = inverse * rest
            fresh = float(rest @ scaled)
            first = first or fresh
            if fresh <= tolerance**2 * first:
                return solution, step
            direction = scaled + (fresh / size if size else 0.0) * direction
            image, size = self.times(direction), fresh
            along = fresh / float(direction @ image)
            solution, rest = solution + along * direction, rest - along * image
            rest -= self.diagonal * (rest.sum() / total)  # rounding brings the common factor back
        raise UnsettledError(f"the joint fit did not settle within {SOLVER_STEPS} steps")


def _settle(
    series: Series, level: FloatArray, per_s: float, within: tuple[float, float]
) -> tuple[FloatArray, int]:
    """Return the likeliest level for a walk, to so much of it and of each solution, and the steps it took."""
    work, every = 0, np.ones(len(level), bool)
    for _ in range(NEWTON_STEPS):
        step, steps = _step(series, level, per_s, every, within[1])
        level, work = level + np.clip(step, -1.0, 1.0), work + steps
        if np.abs(step).max(initial=0.0) < within[0]:
            return level, work
    raise UnsettledError(f"the joint fit did not settle within {NEWTON_STEPS} steps")


def _step(
    series: Series, level: FloatArray, per_s: float, kept: BoolArray, tolerance: float = TOLERANCE
) -> tuple[FloatArray, int]:
    """Return Newton's step of the level, the rates eliminated, and the steps that solving it took."""
    mean, weights = _expected(series, level)
    weights = np.where(kept, weights, 0.0)
    rest = np.where(weights > 0, (series.value - mean) / series.spread, 0.0)
    matrix = walk(weights, series.step_s, per_s)
    schur = Schur.of(series, weights, matrix)
    alone = matrix.solve(rest - matrix.pull(level))
    log_rates, steps = schur.solve(schur.gather(rest - weights * alone), tolerance)
    return alone - matrix.solve(weights * log_rates[series.cell]), steps


def _expected(series: Series, level: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return what each visit should give at a level, and its weight; cells without light weigh nothing."""
    mean = _rates(series, level, np.ones(len(level), bool))[series.cell] * series.exposure * np.exp(level)
    return mean, np.where(mean > 0, mean / series.spread, 0.0)


def _rates(series: Series, level: FloatArray, kept: BoolArray) -> FloatArray:
    """Return the likeliest rates (C) at a level: value over exposure times strength; NaN without exposure."""
    value = added(series.cell, np.where(kept, series.value, 0.0), series.cells)
    strength = np.where(kept, series.exposure * np.exp(level), 0.0)
    exposure = added(series.cell, strength, series.cells)
    return np.divide(value, exposure, out=np.full(series.cells, np.nan), where=exposure > 0)
