from __future__ import annotations

from itertools import combinations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq import openings
from daq.estimate import kappa, residual, terms
from daq.estimate.arrays import FloatArray
from daq.estimate.contrast import contrast, epsilon_and_delta

COUNTS = dict(
    zip(openings.names(3), (100.0, 1100.0, 1200.0, 3500.0, 1000.0, 2900.0, 3100.0, 6700.0), strict=True)
)

amplitude = st.complex_numbers(max_magnitude=100, allow_nan=False, allow_infinity=False)
count = st.floats(1e3, 1e6)


def intensities(amplitudes: list[complex]) -> dict[str, float]:
    """Return |sum of the open amplitudes|^2 of every opening."""
    return {
        name: abs(sum(a for bit, a in enumerate(amplitudes) if openings.mask(name) >> bit & 1)) ** 2
        for name in openings.names(len(amplitudes))
    }


@given(st.lists(amplitude, min_size=3, max_size=5), st.floats(0, 1e4))
def test_squared_sums_of_amplitudes_have_no_term_above_the_second_order(
    amplitudes: list[complex], background: float
) -> None:
    patterns = {name: value + background for name, value in intensities(amplitudes).items()}

    found = terms(patterns, len(amplitudes))

    scale = max(patterns.values()) + 1e-300
    assert all(abs(value) <= 1e-13 * 32 * scale for name, value in found.items() if len(name) > 2)


@given(st.lists(count, min_size=16, max_size=16))
def test_terms_add_up_to_the_pattern_again(values: list[float]) -> None:
    patterns = dict(zip(openings.names(4), values, strict=True))

    found = terms(patterns, 4)

    singles = {letter: patterns[letter] - patterns["none"] for letter in "ABCD"}
    rebuilt = patterns["none"] + sum(singles.values()) + sum(found.values())
    assert rebuilt == pytest.approx(patterns["ABCD"], rel=1e-10)


@pytest.mark.parametrize("slits", [2, 3, 4, 5])
def test_the_residual_is_the_term_of_highest_order(slits: int) -> None:
    generator = np.random.default_rng(7)
    patterns = {name: float(generator.uniform(1e3, 1e5)) for name in openings.names(slits)}

    found = residual(patterns, 1.0)

    highest = terms(patterns, slits)["ABCDE"[:slits]]
    signed = sum(openings.sign(name, slits) * rate for name, rate in patterns.items())
    assert found.epsilon == pytest.approx(highest) == pytest.approx(signed)


def test_rates_divide_each_opening_by_its_own_live_time() -> None:
    live = {name: 1.0 + index for index, name in enumerate(COUNTS)}
    doubled = {name: counts * live[name] for name, counts in COUNTS.items()}

    found = residual(doubled, live)

    assert found.kappa == pytest.approx(residual(COUNTS, 1.0).kappa, rel=1e-12)


def numerical_se(counts: dict[str, float], normalisation: str) -> float:
    """Return the first-order Poisson error of kappa from central differences."""
    total = 0.0
    for name, value in counts.items():
        step = 1e-4 * value
        up = residual(counts | {name: value + step}, 2.0, normalisation).kappa
        down = residual(counts | {name: value - step}, 2.0, normalisation).kappa
        total += ((up - down) / (2 * step)) ** 2 * value
    return float(np.sqrt(total))


@pytest.mark.parametrize("normalisation", ["pairwise", "central"])
@pytest.mark.parametrize("slits", [3, 4])
def test_the_standard_error_is_the_full_first_order_one(slits: int, normalisation: str) -> None:
    phases = np.linspace(0.0, 0.9, slits)  # every pairwise term well away from zero
    wave = intensities([10.0 * np.exp(1j * phase) for phase in phases])
    counts = {name: 5e4 + 1e3 * index + 100 * wave[name] for index, name in enumerate(wave)}

    found = residual(counts, 2.0, normalisation)

    # Central differences of a ratio with steps of 1e-4: their own error is about 1e-6 relative.
    assert found.kappa_se == pytest.approx(numerical_se(counts, normalisation), rel=1e-5)


@pytest.mark.judges
@pytest.mark.parametrize("normalisation", ["pairwise", "central"])
def test_the_standard_error_agrees_with_an_independent_propagation(normalisation: str) -> None:
    uncertainties = pytest.importorskip("uncertainties")
    n = {name: uncertainties.ufloat(value, value**0.5) for name, value in COUNTS.items()}
    signed = sum(openings.sign(name, 3) * value for name, value in n.items())
    pairs = [n[x + y] - n[x] - n[y] + n["none"] for x, y in combinations("ABC", 2)]
    # All three pairwise terms of these counts are above zero: their absolute values are they themselves.
    judged = signed / (sum(pairs) if normalisation == "pairwise" else n["ABC"] - n["none"])

    found = residual(COUNTS, 1.0, normalisation)

    assert (found.kappa, found.kappa_se) == pytest.approx((judged.nominal_value, judged.std_dev), rel=1e-12)


def test_a_given_variance_replaces_the_poisson_one() -> None:
    found = residual(COUNTS, 1.0, variance=dict.fromkeys(COUNTS, 9.0))

    assert found.epsilon_se == pytest.approx(np.sqrt(8 * 9.0))


def test_arrays_give_each_position_what_it_would_get_alone() -> None:
    scales = np.array([1.0, 2.0, 5.0])
    table = {name: counts * scales for name, counts in COUNTS.items()}

    found = residual(table, 1.0)

    alone = [residual({name: counts[at] for name, counts in table.items()}, 1.0) for at in range(3)]
    assert found.kappa_se == pytest.approx([one.kappa_se for one in alone])
    assert found.epsilon.shape == (3,)


def test_numbers_in_give_numbers_out() -> None:
    assert isinstance(residual(COUNTS, 1.0).kappa, float)


def test_the_central_divisor_is_the_largest_net_rate_of_the_fullest_opening() -> None:
    table = {name: counts * np.array([1.0, 3.0]) for name, counts in COUNTS.items()}

    found = residual(table, 2.0, "central")

    assert found.delta == pytest.approx([3 * 6600 / 2] * 2)
    assert found.kappa[0] == pytest.approx(found.epsilon[0] / (3 * 6600 / 2))


def test_without_pairwise_terms_kappa_is_nan_and_epsilon_keeps_its_error() -> None:
    flat = dict.fromkeys(COUNTS, 1000.0)

    found = residual(flat, 1.0)

    assert np.isnan(found.kappa) and np.isnan(found.kappa_se)
    assert found.epsilon_se == pytest.approx(np.sqrt(8000))


def test_one_position_with_any_weight_is_the_residual_itself() -> None:
    poisson = COUNTS

    value, se = kappa(COUNTS, poisson, 7.0)

    alone = residual(COUNTS, 1.0)
    assert (value, se) == pytest.approx((alone.kappa, alone.kappa_se), rel=1e-12)


@pytest.mark.parametrize("normalisation", ["pairwise", "central"])
def test_kappa_over_a_pattern_has_the_full_first_order_error(normalisation: str) -> None:
    generator = np.random.default_rng(3)
    rates = {name: counts * np.array([1.0, 1.7, 0.4]) for name, counts in COUNTS.items()}
    variances = {name: generator.uniform(1.0, 9.0, 3) for name in COUNTS}
    weights = np.array([0.2, 0.5, 0.3])

    _, se = kappa(rates, variances, weights, normalisation=normalisation)

    total = 0.0
    for name in COUNTS:
        for at in range(3):
            step = np.zeros(3)
            step[at] = 1e-4 * rates[name][at]
            up, down = (
                kappa(rates | {name: rates[name] + sense * step}, variances, weights, None, normalisation)[0]
                for sense in (1, -1)
            )
            total += ((up - down) / (2 * step[at])) ** 2 * variances[name][at]
    assert se == pytest.approx(np.sqrt(total), rel=1e-6)  # differences: about 1e-8 relative


def test_planned_signs_take_the_bias_of_absolute_values_away() -> None:
    # AB has no pairwise term: its measured sign follows the noise, and absolute values lie above the truth.
    generator = np.random.default_rng(11)
    mean = [10.0, 60.0, 60.0, 110.0, 60.0, 210.0, 210.0, 360.0]
    draws = generator.poisson(mean, (4000, 8)).astype(float)
    what = contrast(tuple(range(8)), 3)

    _, measured = epsilon_and_delta(draws, what, "pairwise")
    _, planned = epsilon_and_delta(draws, what, "pairwise", np.ones((4000, 3)))

    # var(delta) = 9*10 + 3*4*60 + 110 + 210 + 210 = 1340: the mean of 4000 to +-0.58; five of them.
    assert planned.mean() == pytest.approx(200.0, abs=2.9)
    assert measured.mean() > 200.0 + 2.9


def test_an_opening_never_measured_is_named() -> None:
    with pytest.raises(ValueError, match="opening 'AC' was never measured"):
        residual({name: counts for name, counts in COUNTS.items() if name != "AC"}, 1.0)


@pytest.mark.parametrize(
    ("counts", "live_s", "words"),
    [
        ({"AB": np.array([1.0, -2.0])}, 1.0, "'AB' at position 1: .*must not be below zero, not -2"),
        ({"B": np.array([1.0, np.nan])}, 1.0, "'B' at position 1: counts are out of range, not nan"),
        ({"C": np.array([1e17, 1.0])}, 1.0, "'C' at position 0: counts are out of range, not 1e\\+17"),
        (
            {},
            {name: 0.0 if name == "BC" else 1.0 for name in COUNTS},
            "'BC' at position 0: live time .*not 0",
        ),
    ],
)
def test_a_number_out_of_range_is_refused_with_opening_and_position(
    counts: dict[str, FloatArray], live_s: object, words: str
) -> None:
    with pytest.raises(ValueError, match=words):
        residual(COUNTS | counts, live_s)


def test_an_unknown_normalisation_is_refused() -> None:
    with pytest.raises(ValueError, match="one of pairwise, central, not 'triple'"):
        residual(COUNTS, 1.0, "triple")


def test_a_pattern_without_divisor_is_refused() -> None:
    flat = dict.fromkeys(COUNTS, np.full(2, 1000.0))

    with pytest.raises(ValueError, match="divisor of kappa is not above zero"):
        kappa(flat, flat, np.ones(2))


@pytest.mark.parametrize(
    ("signs", "words"),
    [({"AB": [1.0], "AC": [1.0]}, "lack the pairwise term 'BC'"), ({"AB": [0.5]}, "'AB' is neither")],
)
def test_planned_signs_must_be_complete(signs: dict[str, list[float]], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        kappa(COUNTS, COUNTS, 1.0, signs)
