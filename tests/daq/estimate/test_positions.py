from __future__ import annotations

import numpy as np
import pytest

from daq.estimate import Sums
from daq.estimate.positions import FLIPS, leftover_by_pair, position_tests, sidak, sign_flips
from tests.daq.estimate.nights import plan, rates_hz

PLACES = np.linspace(-2.0, 2.0, 9)


def noise(pairs: int, seed: int = 1) -> np.ndarray:
    return np.random.default_rng(seed).normal(size=(pairs, len(PLACES)))


def test_up_to_twelve_pairs_every_way_is_tried_once() -> None:
    ways = sign_flips(5, np.random.default_rng(1))

    assert len({tuple(way) for way in ways.tolist()}) == len(ways) == 16
    assert (ways[:, 0] == 1).all() and (ways[0] == 1).all()


def test_more_pairs_are_turned_over_at_random() -> None:
    ways = sign_flips(19, np.random.default_rng(1))

    assert ways.shape == (FLIPS + 1, 19)
    assert (ways[0] == 1).all()
    assert abs(ways[1:].mean()) < 5 / np.sqrt(ways[1:].size)


def test_no_p_is_below_what_so_many_ways_can_tell() -> None:
    found = position_tests(10 + 0.01 * noise(6), np.ones(9), PLACES, sign_flips(6, np.random.default_rng(1)))

    assert found.chi2_p == found.largest_p == 1 / 32


def test_scale_and_sign_of_everything_do_not_matter() -> None:
    x, ways = noise(10), sign_flips(10, np.random.default_rng(1))

    one, two = (position_tests(table, np.ones(9), PLACES, ways) for table in (x, -1e-5 * x))

    assert (two.chi2_p, two.fourier_p) == (one.chi2_p, one.fourier_p)
    assert (two.largest_p, two.largest_mm, two.period_mm) == (one.largest_p, one.largest_mm, one.period_mm)
    assert two.largest_t == pytest.approx(-one.largest_t)


def test_the_position_that_stands_out_is_named() -> None:
    x = noise(19)
    x[:, 6] += 2.0

    found = position_tests(x, np.ones(9), PLACES, sign_flips(19, np.random.default_rng(1)))

    assert found.largest_mm == PLACES[6]
    assert found.largest_p < 0.01 and found.largest_sidak_p < 0.01
    assert found.largest_t > 0


def test_the_period_of_a_ripple_is_named() -> None:
    x = noise(19) + 2.0 * np.sin(2 * np.pi * np.arange(9) / 4.5)

    found = position_tests(x, np.ones(9), PLACES, sign_flips(19, np.random.default_rng(1)))

    assert found.period_mm == pytest.approx(2.25)
    assert found.fourier_p is not None and found.fourier_p < 0.01


def test_uneven_positions_have_no_ripple() -> None:
    places = np.array([0.0, 1.0, 3.0])

    found = position_tests(noise(8)[:, :3], np.ones(3), places, sign_flips(8, np.random.default_rng(1)))

    assert (found.fourier_p, found.period_mm) == (None, None)
    assert found.combined_p == pytest.approx(1 - (1 - min(found.chi2_p, found.largest_p)) ** 2)


def test_a_kappa_of_any_size_leaves_nothing_by_position() -> None:
    of = plan(positions=5)
    rates = rates_hz(of.positions_mm)
    what = rates.copy()
    pairwise = np.abs(rates[:, 3] - rates[:, 1] - rates[:, 2] + rates[:, 0])
    assert (pairwise > 0).all()
    found = Sums(what[None].repeat(6, 0), np.ones((6, 5, 8)), what[None].repeat(6, 0))

    rest, variance = leftover_by_pair(found, of)

    assert np.abs(rest).max() < 1e-9 * rates.max()
    assert variance == pytest.approx(rates.sum(axis=1) / 6)


def test_a_position_that_a_pair_lacks_is_left_out_of_that_pair() -> None:
    of = plan(positions=5)
    rates = rates_hz(of.positions_mm)
    live = np.ones((6, 5, 8))
    live[2, 3] = 0.0
    counts = np.random.default_rng(1).poisson(rates[None].repeat(6, 0)) * live

    rest, _ = leftover_by_pair(Sums(counts, live, counts), of)

    assert rest[2, 3] == 0.0
    assert np.count_nonzero(rest) == 29
    assert of.weights @ rest[0] == pytest.approx(0.0, abs=1e-9 * rates.max())


def test_many_positions_make_one_small_p_ordinary() -> None:
    assert sidak(0.01, 41) == pytest.approx(1 - 0.99**41)
    assert sidak(1e-20, 41) == pytest.approx(41e-20)
    assert sidak(1.0, 2) == pytest.approx(1.0)
