from __future__ import annotations

import json
from dataclasses import replace
from math import sqrt
from random import Random

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import ArrayLike
from scipy.stats import t as student

from daq.estimate import Plan, Sums, anytime_multiplier, estimate_run, estimate_sums, kappa
from daq.estimate.bars import bars
from daq.estimate.headline import headline
from daq.estimate.sums import sums_of
from daq.estimate.tables import tables_of
from daq.estimate.visits import no_visits
from daq.openings import names
from tests.daq.estimate.nights import SLOT_S, dataset, plan, rates_hz, readings

PLAN = plan(positions=3, laps=6)
NIGHT = readings(PLAN, np.random.default_rng(1))


def noise_free(of: Plan, level: ArrayLike) -> Sums:
    """Return the sums of a night without counting noise and dead time; `level` of the source by visit."""
    visits = no_visits(of)
    visits.value[:] = rates_hz(of.positions_mm)[of.position, of.opening] * np.asarray(level)
    visits.live[:] = 1.0
    visits.variance[:] = visits.value
    visits.used[:] = True
    visits.done[:] = True
    return sums_of(visits, of)


@settings(max_examples=30)
@given(st.floats(-0.3, 0.3), st.floats(-0.3, 0.3), st.integers(1, 6))
def test_odd_drift_about_each_pair_cancels(slope: float, cubic: float, positions: int) -> None:
    of = plan(positions, laps=6, dead_time_s=0.0)
    visits = len(of.stand)
    per_pair = visits // 3
    middle = (np.arange(visits) // per_pair + 0.5) * per_pair - 0.5
    distance = 2 * (np.arange(visits) - middle) / per_pair

    found = estimate_sums(noise_free(of, 1 + slope * distance + cubic * distance**3), of)

    assert found.kappa == pytest.approx(0.0, abs=1e-12)


@given(st.floats(-0.9, 0.9))
def test_a_linear_drift_over_the_night_cancels(change: float) -> None:
    level = 1 + change * (2 * np.arange(len(PLAN.stand)) / (len(PLAN.stand) - 1) - 1)

    found = estimate_sums(noise_free(PLAN, level), PLAN)

    assert found.kappa == pytest.approx(0.0, abs=1e-12)


def test_a_linear_drift_does_not_cancel_in_a_cyclic_order() -> None:
    cyclic = plan(positions=1, laps=8, dead_time_s=0.0)
    order = [0, 1, 2, 4, 3, 5, 6, 7]  # none, A, B, C, AB, AC, BC, ABC in every stand
    cyclic = replace(cyclic, opening=np.array(order * 8))
    slope = 1e-6
    level = 1 + slope * SLOT_S * (np.arange(64) - 31.5)

    found = estimate_sums(noise_free(cyclic, level), cyclic)

    # By hand, R = 0.8 + 40 |S|^2 kHz: sum_S s_S R_S t_S is 9 * 40 - 2 * 0.8 kHz slots, delta 6 * 40 kHz; the
    # level of the divisor itself changes by 1e-4 at most.
    assert found.kappa == pytest.approx((9 * 40 - 2 * 0.8) / (6 * 40) * SLOT_S * slope, rel=1e-4)


@settings(max_examples=20)
@given(st.randoms(use_true_random=False))
def test_the_order_of_the_rows_does_not_matter(shuffler: Random) -> None:
    rows = list(NIGHT)
    shuffler.shuffle(rows)

    assert estimate_run(dataset(PLAN, rows)).to_json() == estimate_run(dataset(PLAN, NIGHT)).to_json()


def test_headline_numbers_are_made_of_complete_pairs_only() -> None:
    found = estimate_run(dataset(PLAN, NIGHT[:-1]))

    only_complete = estimate_run(dataset(PLAN, NIGHT[:96]))
    assert found.pairs == 2
    assert (found.kappa, found.kappa_se) == (only_complete.kappa, only_complete.kappa_se)


def test_kappa_and_its_counting_error_are_those_of_the_totals() -> None:
    of = plan(positions=3, laps=6, dead_time_s=0.0)
    rows = readings(of, np.random.default_rng(1))
    counts = np.zeros((3, 8))
    np.add.at(counts, (of.position, of.opening), [row.values[0] for row in rows])
    live_s = 6 * 2.2
    table = {name: counts[:, mask] / live_s for mask, name in enumerate(names(3))}
    variances = {name: counts[:, mask] / live_s**2 for mask, name in enumerate(names(3))}

    found = estimate_run(dataset(of, rows))

    by_hand = kappa(table, variances, of.weights, of.signs)
    assert (found.kappa, found.kappa_counting_se) == pytest.approx(by_hand, rel=1e-12)


def test_the_bars_follow_from_the_jackknife_and_the_number_of_pairs() -> None:
    found = estimate_run(dataset(PLAN, NIGHT))

    assert found.kappa is not None and found.kappa_se is not None and found.kappa_counting_se is not None
    half = student.ppf(0.975, 2) * found.kappa_se
    outer = anytime_multiplier(3, 3) * found.kappa_se
    ratio = found.kappa_se / found.kappa_counting_se
    assert found.interval_95 == pytest.approx((found.kappa - half, found.kappa + half))
    assert found.whole_night_95 == pytest.approx((found.kappa - outer, found.kappa + outer))
    assert (found.excess, found.excess_se) == pytest.approx((ratio, ratio / sqrt(2 * 2)))


def test_the_jackknife_is_that_of_kappa_with_each_pair_left_out() -> None:
    found = estimate_run(dataset(PLAN, NIGHT))

    left_out: list[float] = []
    for pair in range(3):
        rest = [row for row in NIGHT if PLAN.pair[row.visit] != pair]
        renumbered = replace(PLAN, pair=np.where(PLAN.pair > pair, PLAN.pair - 1, PLAN.pair))
        left_out.append(estimate_run(dataset(renumbered, rest)).kappa or 0.0)
    assert found.kappa_se == pytest.approx(sqrt(2 / 3 * 3 * np.var(left_out)), rel=1e-9)


def test_below_two_pairs_there_is_no_bar() -> None:
    found = estimate_run(dataset(PLAN, NIGHT[:48])).to_json()

    undefined = ("kappa_se", "interval_95", "whole_night_95", "excess", "excess_se")
    assert [found[name] for name in undefined] == [None] * 5
    assert found["kappa"] is not None and found["kappa_counting_se"] is not None


def test_no_whole_night_band_while_it_is_infinite() -> None:
    long = plan(positions=1, laps=40)
    rows = readings(long, np.random.default_rng(1))

    found = estimate_run(dataset(long, rows[: 8 * 10]))

    assert found.pairs == 5 and found.interval_95 is not None and found.whole_night_95 is None


def test_the_forecast_shrinks_with_the_pairs_to_come() -> None:
    long = plan(positions=1, laps=40)
    rows = readings(long, np.random.default_rng(1))

    early = estimate_run(dataset(long, rows[: 8 * 10]))
    later = estimate_run(dataset(long, rows[: 8 * 20]))

    assert early.forecast_se == pytest.approx((early.kappa_counting_se or 0.0) * sqrt(5 / 20))
    # blocks that scatter less than counting explains do so by chance: that is not promised to go on
    assert later.kappa_se is not None and later.kappa_counting_se is not None
    assert later.kappa_se < later.kappa_counting_se
    assert later.forecast_se == pytest.approx(later.kappa_counting_se * sqrt(10 / 20))


@pytest.mark.parametrize(("scatter", "expected"), [(0.7, 1.0), (2.0, 2.0)])
def test_the_forecast_is_the_larger_of_scatter_and_counting(scatter: float, expected: float) -> None:
    blocks = 1e-4 * scatter * np.tile([1.0, -1.0], 8)
    counting = float(np.sqrt(15 / 16 * np.sum((blocks / scatter - np.mean(blocks)) ** 2)))

    found = bars(0.0, counting, blocks, 16, 16)

    assert found["excess"] == pytest.approx(scatter)
    assert found["forecast_se"] == pytest.approx(expected * counting)


def test_a_position_whose_every_stand_was_left_out_carries_no_weight() -> None:
    of = plan(positions=2, laps=4, dead_time_s=0.0)
    full = noise_free(of, np.ones(len(of.stand)))
    kept = np.array([[[1.0], [0.0]]])
    without = Sums(full.value * kept, full.live * kept, full.variance * kept)
    without.value[:, 0, 7] *= 1.001

    found = estimate_sums(without, of)

    rates = rates_hz([float(of.positions_mm[0])])[0]
    assert found.epsilon == pytest.approx(0.001 * rates[7])
    assert np.isnan(found.rates_hz[1]).all() and np.isnan(found.epsilon_hz[1])


def test_kappa_is_not_printable_where_delta_drowns_in_its_error() -> None:
    weak = plan(positions=1, laps=4, dead_time_s=0.0)
    few = noise_free(weak, np.full(len(weak.stand), 2e-5))  # delta: 19 counts out of 24

    assert not estimate_sums(few, weak).printable
    assert estimate_sums(noise_free(weak, np.ones(len(weak.stand))), weak).printable


def test_the_estimate_is_plain_json() -> None:
    found = estimate_run(dataset(PLAN, NIGHT[:60])).to_json()

    assert json.loads(json.dumps(found, allow_nan=False)) == found
    assert np.shape(found["rates_hz"]) == (3, 8)


def test_the_central_normalisation_is_obeyed() -> None:
    of = replace(plan(positions=3, laps=4, dead_time_s=0.0), normalisation="central")
    sums = noise_free(of, np.ones(len(of.stand)))
    sums.value[:, :, 7] += 360.0 * sums.live[:, :, 7]

    found = estimate_sums(sums, of)

    assert found.kappa == pytest.approx(360.0 / 360e3 / (1 + 1e-3), rel=1e-9)
    assert found.normalisation == "central"


def test_four_slits_are_estimated_by_the_fourth_order() -> None:
    of = plan(positions=1, laps=4, dead_time_s=0.0)
    pairs = ["AB", "AC", "BC", "AD", "BD", "CD"]
    four = replace(
        of,
        slits=4,
        openings=np.arange(16),
        signs={pair: np.ones(1) for pair in pairs},
    )
    rates = np.array([mask.bit_count() ** 2 for mask in range(16)], float)
    value = np.tile(rates * 1e6, (2, 1, 1))
    value[:, :, 15] += 12.0

    found = estimate_sums(Sums(value, np.ones((2, 1, 16)), value), four)

    assert found.kappa == pytest.approx(12 / 12e6)


def test_a_dataset_without_a_plan_is_refused_with_what_it_lacks() -> None:
    bare = dataset(PLAN, NIGHT)
    del bare.attrs["weights"], bare.attrs["positions_mm"]

    with pytest.raises(ValueError, match="lack positions_mm, weights"):
        estimate_run(bare)


def test_a_position_that_is_not_planned_is_refused() -> None:
    rows = [replace(NIGHT[0], position_mm=7.5), *NIGHT[1:]]

    with pytest.raises(ValueError, match=r"the position 7\.5 of a row is none of those planned"):
        estimate_run(dataset(PLAN, rows))


def test_an_opening_that_is_not_planned_is_refused() -> None:
    rows = [replace(NIGHT[0], opening=8), *NIGHT[1:]]

    with pytest.raises(ValueError, match="the opening 8 of a row is none of those planned"):
        estimate_run(dataset(PLAN, rows))


def test_an_empty_dataset_is_a_night_before_its_first_visit() -> None:
    assert estimate_run(dataset(PLAN, [])).to_json()["kappa"] is None


def test_the_t_bar_covers_as_it_says_under_a_walking_source() -> None:
    # 1500 nights of 8 pairs; a random walk of 0.5 % a stand adds to the counting noise.
    nights, of = 1500, plan(positions=3, laps=16, dead_time_s=0.0)
    generator = np.random.default_rng(23)
    rates = rates_hz(of.positions_mm)[of.position, of.opening] * 2.2
    covered, kappas, ses = 0, np.empty(nights), np.empty(nights)
    for night in range(nights):
        walk = np.cumsum(generator.normal(0.0, 0.005 / np.sqrt(8), len(rates)))
        visits = no_visits(of)
        counts = generator.poisson(rates * np.exp(walk))
        visits.value[:] = visits.variance[:] = counts
        visits.live[:], visits.used[:], visits.done[:] = 2.2, True, True
        found = headline(tables_of(sums_of(visits, of)), 8, of)
        covered += found["interval_95"][0] <= 0 <= found["interval_95"][1]
        kappas[night], ses[night] = found["kappa"], found["kappa_se"]

    # Standard error of the coverage sqrt(0.95 * 0.05 / 1500) = 0.56 %: four of them. The mean square of the
    # bar and the variance of kappa have relative errors of 1.4 % and 3.7 %: four of their sum.
    assert covered / nights == pytest.approx(0.95, abs=0.0225)
    assert np.mean(ses**2) == pytest.approx(kappas.var(), rel=4 * sqrt(0.014**2 + 0.037**2))
    assert abs(kappas.mean()) < 4 * kappas.std() / sqrt(nights)


def test_a_dead_time_below_zero_is_refused_with_a_sentence() -> None:
    archive = dataset(PLAN, NIGHT)
    archive.attrs["dead_time_s"] = -1e-9

    with pytest.raises(ValueError, match="a dead time must not be below zero, not -1e-09 s"):
        estimate_run(archive)
