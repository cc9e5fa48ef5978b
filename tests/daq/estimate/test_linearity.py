from __future__ import annotations

from dataclasses import replace
from math import sqrt
from typing import Any

import numpy as np
import pytest

from daq.estimate import estimate_run, expected_rates_hz, planned_weights, seen_rate_hz
from daq.estimate.arrays import FloatArray
from daq.estimate.blocks import jackknife
from daq.estimate.contrast import contrast, epsilon_and_delta
from daq.estimate.dataset import rows_of_dataset
from daq.estimate.linearity import dead_time_left_s, marginal_weights
from daq.estimate.regression import weighted_fit
from daq.estimate.sums import sums_of
from daq.estimate.tables import plan_contrast, tables_of
from daq.estimate.visits import visits_of
from daq.openings import name
from tests.daq.estimate.nights import dataset, plan, rates_hz, readings

PLACES_MM = np.linspace(-12.8, 12.8, 41)
WHAT = contrast(tuple(range(8)), 3)


def inflation(rates: FloatArray) -> float:
    """Return by how much the variance of kappa grows when the template is fitted beside it."""
    weights, _ = planned_weights(rates, range(8), 3)
    _, delta = epsilon_and_delta(rates, WHAT, "pairwise")
    variance = rates @ WHAT.residual**2
    before, after = (
        np.sum(these**2 * variance) / (these @ delta) ** 2
        for these in (weights, marginal_weights(weights, rates, range(8), 3))
    )
    return float(after / before)


def kappa_of(weights: FloatArray, rates: FloatArray) -> float:
    epsilon, delta = epsilon_and_delta(rates, WHAT, "pairwise")
    return float(weights @ epsilon / (weights @ delta))


@pytest.mark.parametrize("kind", ["non-paralysable", "paralysable"])
def test_a_small_dead_time_left_over_does_not_move_kappa(kind: str) -> None:
    rates = rates_hz(PLACES_MM)
    weights, _ = planned_weights(rates, range(8), 3)
    seen = seen_rate_hz(rates, 1e-10, kind)  # 3.6e-5 of the counts at the brightest place

    plain, marginal = kappa_of(weights, seen), kappa_of(marginal_weights(weights, rates, range(8), 3), seen)

    assert abs(plain) > 3e-8
    assert abs(marginal) < 1e-9  # second order: the square of 3.6e-5


def test_the_lantern_pays_next_to_nothing_for_it() -> None:
    assert inflation(rates_hz(PLACES_MM)) < 1.001


@pytest.mark.parametrize("pitch", [2.0, 3.0, 4.0])
@pytest.mark.parametrize("reach", [0.3, 0.5, 0.8])
def test_no_usual_pattern_pays_more_than_three_percent(pitch: float, reach: float) -> None:
    """Derived: at most 1.0234 over nine geometries, pitch over width 2 to 4, reach 0.3 to 0.8."""
    width_m, wavelength_m, distance_m = 40e-6, 532e-9, 1.2
    slits = {letter: (pitch * width_m * at, width_m) for at, letter in enumerate("ABC")}
    cuts = {mask: {} if mask == 0 else {letter: slits[letter] for letter in name(mask)} for mask in range(8)}
    places = np.linspace(-reach, reach, 41) * wavelength_m / width_m * distance_m * 1e3

    rates = expected_rates_hz(cuts, places, wavelength_m, distance_m, 1.0, 0.02)

    assert 1.0 <= inflation(rates) < 1.03


def test_too_few_positions_keep_their_weights() -> None:
    rates = rates_hz([0.0])
    weights, _ = planned_weights(rates, range(8), 3)

    assert np.array_equal(marginal_weights(weights, rates, range(8), 3), weights)


def test_weights_for_unequal_dwell_are_orthogonal_too() -> None:
    rates = rates_hz(PLACES_MM)
    dwell_s = np.random.default_rng(1).uniform(1.0, 3.0, rates.shape)
    weights, _ = planned_weights(rates, range(8), 3)

    found = marginal_weights(weights, rates, range(8), 3, dwell_s)

    assert abs(found @ ((rates**2) @ WHAT.residual)) < 1e-9 * float(np.abs(found) @ rates.sum(axis=1) ** 2)
    assert found.sum() == pytest.approx(1.0)


@pytest.mark.parametrize("left_s", [0.0, 30e-9])
def test_the_dead_time_that_is_left_shows_in_the_pattern(left_s: float) -> None:
    of = replace(
        plan(positions=21, laps=40, dead_time_s=40e-9 + left_s), positions_mm=np.linspace(-10, 10, 21)
    )
    weights, signs = planned_weights(rates_hz(of.positions_mm), range(8), 3)
    of = replace(of, weights=weights, signs=signs)
    rows = readings(of, np.random.default_rng(2))

    found = estimate_run(dataset(replace(of, dead_time_s=40e-9), rows))

    assert found.dead_time_left_s is not None and found.dead_time_left_se_s is not None
    assert 1e-10 < found.dead_time_left_se_s < 5e-9
    # A jackknife of 20 blocks: four and a half of its errors are one case in 5000.
    assert found.dead_time_left_s == pytest.approx(left_s, abs=4.5 * found.dead_time_left_se_s)


def test_the_error_of_the_dead_time_left_is_honest() -> None:
    of = replace(plan(positions=9, laps=16, dead_time_s=0.0), positions_mm=np.linspace(-8, 8, 9))
    weights, signs = planned_weights(rates_hz(of.positions_mm), range(8), 3)
    of = replace(of, weights=weights, signs=signs)
    generator, z = np.random.default_rng(3), []
    for _ in range(100):
        found = estimate_run(dataset(of, readings(of, generator)))
        assert found.dead_time_left_s is not None and found.dead_time_left_se_s is not None
        z.append(found.dead_time_left_s / found.dead_time_left_se_s)

    # Student's t of 7 degrees: standard deviation 1.18, known from 100 nights to 9 %: four of them.
    assert np.std(z) == pytest.approx(sqrt(7 / 5), rel=0.36)


@pytest.mark.parametrize("changes", [{"counting": "power"}, {}], ids=["power", "two positions"])
def test_where_the_pattern_cannot_tell_nothing_is_told(changes: dict[str, Any]) -> None:
    of = replace(plan(positions=5 if changes else 2, laps=4, dead_time_s=0.0), **changes)
    rows = [replace(row, values_var=(row.values[0],)) for row in readings(of, np.random.default_rng(4))]

    assert estimate_run(dataset(of, rows)).dead_time_left_s is None


def test_the_dead_time_left_is_that_of_weighted_least_squares_block_by_block() -> None:
    """Against the library's own fit of two columns, for every block that is left out."""
    of = plan(positions=9, laps=12)
    visits = visits_of(rows_of_dataset(dataset(of, readings(of, np.random.default_rng(5)))), of)
    tables = tables_of(sums_of(visits, of))
    what, signs = plan_contrast(of)
    spread = tables.variances @ what.residual**2

    def fitted(rates: FloatArray) -> float:
        epsilon, delta = epsilon_and_delta(rates, what, "pairwise", signs)
        columns = np.stack([delta, -(rates**2) @ what.residual], axis=-1)
        return float(weighted_fit(columns, epsilon, spread).coefficients[1])

    found = dead_time_left_s(tables, of)

    assert found is not None
    assert found[0] == pytest.approx(fitted(tables.rates), rel=1e-9)
    assert found[1] == pytest.approx(jackknife([fitted(rates) for rates in tables.without])[0], rel=1e-9)
