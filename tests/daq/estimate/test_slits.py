from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq.estimate import expected_rates_hz, kappa, planned_weights, residual, slit_pattern
from daq.openings import names
from tests.daq.estimate.nights import SLITS_M, rates_hz

metres = st.floats(1e-6, 1e-4)


@given(st.floats(-0.1, 0.1), st.lists(st.tuples(metres, metres), min_size=3, max_size=3))
def test_a_diffraction_pattern_has_no_third_order(angle_rad: float, slits: list[tuple[float, float]]) -> None:
    patterns = {}
    for mask, name in enumerate(names(3)):
        shown = [slit for bit, slit in enumerate(slits) if mask >> bit & 1]
        patterns[name] = slit_pattern(angle_rad, 5e-7, [c for c, _ in shown], [w for _, w in shown])

    found = residual(patterns, 1.0)

    assert abs(found.epsilon) < 1e-13 * 24  # 24 = sum of the intensities at the centre


def test_a_slit_alone_gives_one_at_zero_angle_whatever_its_width() -> None:
    assert slit_pattern(0.0, 5e-7, [3e-5], [2e-5]) == pytest.approx(1.0)
    assert slit_pattern(0.0, 5e-7, [3e-5], [4e-5]) == pytest.approx(1.0)


def test_amplitudes_add_with_their_phases() -> None:
    assert slit_pattern(0.0, 5e-7, [0.0, 1e-4], [1e-5, 1e-5], [1.0, 1j]) == pytest.approx(2.0)


def test_no_slit_gives_no_light() -> None:
    assert slit_pattern(np.zeros(3), 5e-7, [], []).tolist() == [0.0, 0.0, 0.0]


def test_expected_rates_start_from_the_first_slit_alone_and_the_background() -> None:
    rates = rates_hz([0.0])[0]

    assert rates == pytest.approx([800, 40800, 40800, 160800, 40800, 160800, 160800, 360800])


def test_a_wider_cut_of_one_opening_lights_that_opening_more() -> None:
    cuts = {0: {}, 1: {"A": (0.0, 40e-6)}, 2: {"B": (1e-4, 44e-6)}, 3: dict(list(SLITS_M.items())[:2])}

    rates = expected_rates_hz(cuts, [0.0], 532e-9, 1.2, 100.0, 0.0)[0]

    assert rates == pytest.approx([0.0, 100.0, 121.0, 400.0])


def test_expected_rates_need_the_first_slit_alone() -> None:
    with pytest.raises(ValueError, match="opening 'A' is missing"):
        expected_rates_hz({0: {}, 2: {"B": (0.0, 1e-5)}}, [0.0], 5e-7, 1.0, 1.0, 0.0)


def test_planned_weights_are_those_of_least_variance() -> None:
    rates = rates_hz(np.linspace(-12.8, 12.8, 41).tolist())
    patterns = {name: rates[:, mask] for mask, name in enumerate(names(3))}
    weights, signs = planned_weights(rates, range(8), 3)

    _, least = kappa(patterns, patterns, weights, signs)

    generator = np.random.default_rng(4)
    others = [
        kappa(patterns, patterns, weights * generator.uniform(0.8, 1.2, 41), signs)[1] for _ in range(50)
    ]
    assert weights.sum() == pytest.approx(1.0)
    assert min(others) > least


def test_planned_signs_are_those_of_the_pairwise_terms() -> None:
    positions = [0.0, 2.66]  # 532 nm * 1.2 m / (2 * 120 um): neighbouring slits in antiphase

    _, signs = planned_weights(rates_hz(positions), range(8), 3)

    assert {term: sign.tolist() for term, sign in signs.items()} == {
        "AB": [1.0, -1.0],
        "AC": [1.0, 1.0],
        "BC": [1.0, -1.0],
    }


def test_slits_that_do_not_interfere_have_no_weights() -> None:
    rates = np.array([[1.0, 2.0, 2.0, 3.0, 2.0, 3.0, 3.0, 4.0]])

    with pytest.raises(ValueError, match="no pairwise interference is expected"):
        planned_weights(rates, range(8), 3)


def test_a_mask_without_an_opening_is_refused_by_name() -> None:
    with pytest.raises(ValueError, match="opening 'AC' is missing"):
        planned_weights(np.ones((1, 7)), [0, 1, 2, 3, 4, 6, 7], 3)
