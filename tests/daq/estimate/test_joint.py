from __future__ import annotations

import tracemalloc
from dataclasses import replace

import numpy as np
import pytest
from scipy.linalg import block_diag, cho_factor, cho_solve

from daq.estimate.arrays import FloatArray
from daq.estimate.dataset import rows_of_dataset
from daq.estimate.irregular import _blocks, series_of
from daq.estimate.joint import Fit, Series, fit, rates_without, standard_error
from daq.estimate.sensitivity import taken_visits
from daq.estimate.visits import visits_of
from daq.estimate.walk import likeliest_per_s, walk
from tests.benchmarks.bench_estimate import irregular_night

STEP_S = 3.0
RATES = np.array([4e3, 9e3, 2e4, 3e4])  # counts of a visit in four cells


def series(
    generator: np.random.Generator, visits: int = 240, per_sqrt_hour: float = 0.03, lost: float = 0.1
) -> tuple[Series, FloatArray]:
    """Return visits of four cells in random order with gaps, and the source's true log."""
    cell = np.concatenate([generator.permutation(4) for _ in range(visits // 4)])
    level = np.cumsum(generator.normal(0.0, per_sqrt_hour * np.sqrt(STEP_S / 3600), visits))
    value = generator.poisson(RATES[cell] * np.exp(level)).astype(float)
    kept = generator.random(visits) >= lost
    time_s = STEP_S * np.flatnonzero(kept)
    zeros, ones = np.zeros(kept.sum()), np.ones(kept.sum())
    block = np.arange(visits)[kept] * 6 // visits
    return Series(cell[kept], value[kept], ones, ones, np.diff(time_s), block, zeros, 4), level[kept]


def dense(of: Series, level: FloatArray, rates: FloatArray, per_s: float) -> FloatArray:
    """Return the Fisher matrix of the log rates (4) and the levels, the first of them fixed at zero."""
    mean = rates[of.cell] * of.exposure * np.exp(level) / of.spread
    return _dense(np.eye(4)[of.cell], mean, of.step_s, per_s)


def _dense(cells: FloatArray, mean: FloatArray, step_s: FloatArray, per_s: float) -> FloatArray:
    visits, many = cells.shape
    design = np.hstack([cells, np.eye(visits)[:, 1:]])
    step = (np.eye(visits)[1:] - np.eye(visits)[:-1])[:, 1:]
    prior = step.T @ np.diag(1 / (per_s * step_s)) @ step
    return np.asarray(design.T @ (mean[:, None] * design) + block_diag(np.zeros((many, many)), prior))


def test_the_fit_is_where_the_penalised_likelihood_is_greatest() -> None:
    of, _ = series(np.random.default_rng(1))

    found = fit(of)

    mean = found.rates[of.cell] * np.exp(found.level)
    pull = np.diff(found.level) / (found.per_s * of.step_s)
    slope = of.value - mean - (np.diff(-pull, prepend=0.0, append=0.0))
    by_cell = np.bincount(of.cell, of.value - mean)
    # Against counts of 1e4 a visit, whose own noise is 1e2.
    assert np.abs(slope).max() < 1e-3
    assert np.abs(by_cell).max() < 1e-3


def test_the_mean_strength_is_one() -> None:
    of, _ = series(np.random.default_rng(2))

    found = fit(of)

    assert np.average(np.exp(found.level), weights=of.exposure) == pytest.approx(1.0, rel=1e-12)


def test_the_standard_error_is_that_of_dense_algebra() -> None:
    of, _ = series(np.random.default_rng(3))
    found = fit(of)
    gradient = np.array([0.3, -0.7, 1.0, -0.6])

    told = standard_error(of, found, gradient)

    right = np.concatenate([gradient, np.zeros(len(of.cell) - 1)])
    matrix = dense(of, found.level, found.rates, found.per_s)
    assert told == pytest.approx(np.sqrt(right @ cho_solve(cho_factor(matrix), right)), rel=1e-8)


def test_many_cells_under_a_wild_walk_are_solved_to_the_last_digits() -> None:
    generator, cells, visits = np.random.default_rng(13), 24, 480
    cell = np.concatenate([generator.permutation(cells) for _ in range(visits // cells)])
    level = np.cumsum(generator.normal(0.0, 0.05, visits))
    rates = np.linspace(2e3, 4e4, cells)
    value = generator.poisson(rates[cell] * np.exp(level)).astype(float)
    ones, start = np.ones(visits), np.zeros(visits)
    of = Series(cell, value, ones, ones, np.full(visits - 1, STEP_S), cell * 0, start, cells)
    gradient = generator.normal(size=cells)
    gradient -= gradient.mean()

    found = fit(of)
    told = standard_error(of, found, gradient)

    mean = found.rates[cell] * np.exp(found.level)
    pull = np.diff(found.level) / (found.per_s * STEP_S)
    slope = value - mean + np.diff(pull, prepend=0.0, append=0.0)
    design = np.eye(cells)[cell]
    matrix = _dense(design, mean, np.full(visits - 1, STEP_S), found.per_s)
    right = np.concatenate([gradient, np.zeros(visits - 1)])
    assert told == pytest.approx(np.sqrt(right @ np.linalg.solve(matrix, right)), rel=1e-9)
    # The noise of a visit is 45 counts and more.
    assert max(np.abs(slope).max(), np.abs(design.T @ (value - mean)).max()) < 1e-4


def test_a_source_that_walks_as_far_as_it_is_strong_in_an_hour_settles() -> None:
    of, archive = irregular_night((41, 38), 1.0)
    visits = visits_of(rows_of_dataset(archive), of)
    taken = taken_visits(visits, of, visits.good)
    assert taken is not None

    found = fit(series_of(visits, of, taken))

    assert found.per_s * 3600 == pytest.approx(1.0, rel=4 * np.sqrt(2 / len(taken.visit)))


def test_leaving_a_block_out_is_the_whole_newton_fit_without_it() -> None:
    of, _ = series(np.random.default_rng(4))
    found = fit(of)

    one_step = rates_without(of, found, 2)

    kept = np.flatnonzero(of.block != 2)
    time_s = np.concatenate([[0.0], np.cumsum(of.step_s)])
    rest = Series(
        of.cell[kept], of.value[kept], of.exposure[kept], of.spread[kept],
        np.diff(time_s[kept]), of.block[kept], found.level[kept], 4,
    )  # fmt: skip
    settled = _at_walk(rest, found.per_s)
    ratio = one_step / one_step[0]
    # What a second step would change is of second order: the noise of a rate is 2e-3 here.
    assert ratio == pytest.approx(settled / settled[0], rel=2e-5)
    assert np.abs(ratio / (found.rates / found.rates[0]) - 1).max() > 2e-4  # the block did matter


def _at_walk(of: Series, per_s: float) -> FloatArray:
    """Return the rates of a fit at a given walk, by dense Newton steps."""
    level, rates = of.start - of.start[0], np.bincount(of.cell, of.value) / np.bincount(of.cell)
    visits = len(of.cell)
    step = np.eye(visits)[1:] - np.eye(visits)[:-1]
    for _ in range(20):
        mean = rates[of.cell] * np.exp(level)
        pull = step.T @ (step @ level / (per_s * of.step_s))
        slope = np.concatenate([np.bincount(of.cell, of.value - mean, 4), (of.value - mean - pull)[1:]])
        change = np.linalg.solve(dense(of, level, rates, per_s), slope)
        rates, level = rates * np.exp(change[:4]), level + np.concatenate([[0.0], change[4:]])
    return rates


def test_ratios_of_rates_scatter_as_the_model_says() -> None:
    generator, nights = np.random.default_rng(5), 300
    gradient = np.array([1.0, -1.0, 1.0, -1.0])
    z = []
    for _ in range(nights):
        of, _ = series(generator, visits=120, per_sqrt_hour=0.1)
        found = fit(of)
        z.append(gradient @ np.log(found.rates / RATES) / standard_error(of, found, gradient))

    # 300 nights: the mean is known to 0.058, the standard deviation to 4.1 %; four of each.
    assert abs(np.mean(z)) < 4 / np.sqrt(nights)
    assert np.std(z) == pytest.approx(1.0, abs=4 / np.sqrt(2 * nights))


def test_a_steady_source_is_found_steady_and_the_rates_are_the_totals() -> None:
    of, _ = series(np.random.default_rng(6), per_sqrt_hour=0.0)

    found = fit(of)

    plain = np.bincount(of.cell, of.value) / np.bincount(of.cell)
    assert found.rates == pytest.approx(plain, rel=1e-3)


def test_a_cell_without_counts_is_zero_and_hurts_nobody() -> None:
    of, _ = series(np.random.default_rng(7))
    of = replace(of, value=np.where(of.cell == 1, 0.0, of.value))

    found = fit(of)

    assert found.rates[1] == 0.0
    assert np.isfinite(found.rates).all()
    assert np.isfinite(standard_error(of, found, np.array([1.0, 0.0, -0.5, -0.5])))


def test_few_counts_a_visit_leave_the_rates_unbiased() -> None:
    generator, nights = np.random.default_rng(8), 200
    found = []
    for _ in range(nights):
        cell = np.concatenate([generator.permutation(4) for _ in range(60)])
        level = 0.3 * np.sin(np.arange(240) / 40)
        value = generator.poisson(np.array([0.3, 1.0, 2.0, 4.0])[cell] * np.exp(level)).astype(float)
        ones = np.ones(240)
        of = Series(cell, value, ones, ones, np.full(239, STEP_S), cell * 0, np.zeros(240), 4)
        found.append(np.array(fit(of).rates))

    ratio = np.mean(found, axis=0) / np.mean(found, axis=0).sum()
    # 200 nights of 60 visits: 0.3 counts a visit are known to 1.7 %; four of them.
    assert ratio == pytest.approx(np.array([0.3, 1.0, 2.0, 4.0]) / 7.3, rel=0.07)


@pytest.mark.judges
def test_the_likeliest_walk_is_that_of_an_independent_state_space_model() -> None:
    structural = pytest.importorskip("statsmodels.tsa.statespace.structural")
    generator = np.random.default_rng(9)
    noise, step = 0.01, 0.004
    seen = np.cumsum(generator.normal(0, step, 800)) + generator.normal(0, noise, 800)

    ours = likeliest_per_s(np.full(800, noise**-2), seen, np.full(799, 1.0))

    model = structural.UnobservedComponents(100 * seen, "local level")
    with model.fix_params({"sigma2.irregular": (100 * noise) ** 2}):
        params = model.fit(disp=False, method="powell").params
    judged = params[model.param_names.index("sigma2.level")] / 1e4
    # Both stop within 1e-3 of a maximum that is 12 % wide.
    assert ours == pytest.approx(judged, rel=0.01)


@pytest.mark.judges
def test_without_a_walk_the_fit_is_a_poisson_regression() -> None:
    linear = pytest.importorskip("statsmodels.genmod.generalized_linear_model")
    families = pytest.importorskip("statsmodels.genmod.families")
    of, _ = series(np.random.default_rng(10), per_sqrt_hour=0.0)

    judged = linear.GLM(of.value, np.eye(4)[of.cell], family=families.Poisson()).fit()

    plain = Fit(np.exp(judged.params), np.zeros(len(of.cell)), 1e-12, 0)
    gradient = np.array([1.0, -0.5, -0.3, -0.2])
    spread = np.sqrt(gradient @ judged.cov_params() @ gradient)
    assert fit(of).rates == pytest.approx(np.exp(judged.params), rel=1e-3)
    assert standard_error(of, plain, gradient) == pytest.approx(spread, rel=1e-6)


def test_a_walk_without_a_weight_is_refused() -> None:
    with pytest.raises(ValueError, match="at least one sample with a weight"):
        walk(np.zeros(5), np.ones(4), 1.0)


@pytest.mark.parametrize("visits", [400, 1600])
def test_the_work_of_the_solver_does_not_grow_with_the_number_of_visits(visits: int) -> None:
    of, _ = series(np.random.default_rng(11), visits=visits)

    # Four cells: the Schur complement has four dimensions, so every solve takes at most four steps and one
    # or two more for rounding, and three fits settle in five Newton steps each.
    assert fit(of).work <= 3 * 5 * 6


def test_memory_grows_no_faster_than_the_number_of_visits() -> None:
    def peak(visits: int) -> int:
        of, _ = series(np.random.default_rng(12), visits=visits)
        tracemalloc.start()
        fit(of)
        most = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        return most

    assert peak(16_000) < 2.2 * peak(8_000)


@pytest.mark.parametrize(("pairs", "blocks"), [(1, 1), (19, 19), (40, 40), (41, 21), (1525, 21)])
def test_very_many_pairs_are_left_out_some_at_once(pairs: int, blocks: int) -> None:
    found = _blocks(np.repeat(np.arange(pairs) * 3, 2))

    assert len(np.unique(found)) == blocks
    assert np.all(np.diff(found) >= 0)
