"""The residual: definition, signs, and cases that exact arithmetic gives."""

from __future__ import annotations

from math import sqrt

import numpy as np
import pytest

from daq.estimate import kappa, planned_weights, residual, seen_rate_hz, slit_pattern, terms, true_rate_hz
from daq.openings import names, sign

# Integer example, all pairwise terms positive; derived by exact arithmetic, not a published number.
COUNTS = {"none": 100, "A": 1100, "B": 1200, "C": 1000, "AB": 3500, "AC": 2900, "BC": 3100, "ABC": 6700}

# Three equal slits at the central maximum: intensities 0, 1, 4, 9.
CENTRE = {name: 0.0 if name == "none" else float(len(name) ** 2) for name in names(3)}


def test_the_signs_are_those_of_the_hierarchy_of_sum_rules() -> None:
    """From "Quantum mechanics as quantum measure theory", Mod. Phys. Lett. A 9, 3119 (1994)."""
    order = ("none", "A", "B", "C", "AB", "AC", "BC", "ABC")

    assert [sign(name, 3) for name in order] == [-1, 1, 1, 1, -1, -1, -1, 1]


def test_signs_in_binary_order_are_minus_the_thue_morse_word() -> None:
    """Prouhet 1851; sums of powers of the place: 0, 0, 0, 48 (from memory, recomputed)."""
    signs = np.array([sign(name, 3) for name in names(3)])

    assert [int(np.sum(signs * np.arange(8) ** power)) for power in range(4)] == [0, 0, 0, 48]


def test_the_integer_example() -> None:
    found = residual(COUNTS, 1.0)

    values = (found.epsilon, found.epsilon_se, found.delta, found.kappa, found.kappa_se)
    assert values == pytest.approx((400, 140.0, 3200, 0.125, 0.048481582762813134), rel=1e-12)
    assert terms(COUNTS, 3) == pytest.approx({"AB": 1300, "AC": 900, "BC": 1000, "ABC": 400}, rel=1e-12)


def test_the_integer_example_by_the_central_rate() -> None:
    assert residual(COUNTS, 1.0, "central").kappa == pytest.approx(0.06060606060606061, rel=1e-12)


def test_neglecting_the_error_of_delta_would_give_less() -> None:
    found = residual(COUNTS, 1.0)

    assert found.epsilon_se / found.delta == pytest.approx(0.04375, rel=1e-12)
    assert found.kappa_se > 0.04375


def test_three_unequal_amplitudes_have_no_third_order() -> None:
    """Born's rule is quadratic: Mod. Phys. Lett. A 9, 3119 (1994); digits derived."""
    wave = [1.0, 0.8 * np.exp(0.7j), 1.1 * np.exp(-2.1j)]
    patterns = {
        name: abs(sum(a for bit, a in enumerate(wave) if mask >> bit & 1)) ** 2
        for mask, name in enumerate(names(3))
    }

    found = residual(patterns, 1.0)

    assert (patterns["AB"], patterns["ABC"]) == pytest.approx((2.8637474996551813, 1.3047747499586564))
    assert found.delta == pytest.approx(3.992720249351706, rel=1e-12)
    assert abs(found.epsilon) < 1e-12


def test_a_fixed_leak_of_each_shut_slit_fakes_nothing() -> None:
    """Derived: an amplitude that is affine in the open slits keeps the residual at zero."""
    wave, leak = np.array([1.0, 1.0, 1.0]), 0.01
    patterns = {
        name: abs(sum(a if mask >> bit & 1 else leak * a for bit, a in enumerate(wave))) ** 2
        for mask, name in enumerate(names(3))
    }

    assert abs(residual(patterns, 1.0).epsilon) < 1e-12


def test_a_slit_dimmed_in_one_opening_only_shows_with_its_sign() -> None:
    """Derived: power of A 1 % low when AB is in place, equal amplitudes."""
    patterns = CENTRE | {"AB": (1 + sqrt(0.99)) ** 2}

    found = residual(patterns, 1.0)

    assert found.epsilon == pytest.approx(0.020025125786760523, abs=1e-9)
    assert found.epsilon / 6 == pytest.approx(0.003337520964460087, abs=1e-9)


def test_a_term_put_into_the_fullest_opening_comes_out_as_kappa() -> None:
    found = residual(CENTRE | {"ABC": 9.006}, 1.0)

    assert (found.epsilon, found.delta, found.kappa) == pytest.approx((0.006, 6.0, 0.001), rel=1e-9)


@pytest.mark.parametrize(("n", "se"), [(1e4, 0.00816496580927726), (6666.67, 1e-2), (66666666.7, 1e-4)])
def test_counting_limits_kappa_to_four_over_the_root_of_all_counts(n: float, se: float) -> None:
    """Derived, central maximum, no background; n counts behind one slit, 24 n in all."""
    counts = {name: n * rate for name, rate in CENTRE.items()}

    # Six digits of n are given for the last two.
    assert residual(counts, 1.0).kappa_se == pytest.approx(se, rel=1e-6)
    assert 4 / sqrt(sum(counts.values())) == pytest.approx(se, rel=1e-6)


def test_counts_scatter_as_the_standard_error_says() -> None:
    draws = np.random.default_rng(31).poisson([1e4 * CENTRE[name] for name in names(3)], (20_000, 8))

    found = residual({name: draws[:, mask] for mask, name in enumerate(names(3))}, 1.0)

    # The standard deviation of 20 000 draws is known to 0.5 %: four of them.
    assert found.kappa.std() == pytest.approx(0.00816496580927726, rel=0.02)


@pytest.mark.parametrize(
    ("rate_hz", "dead_time_s", "expected"),
    [
        (1e4, 5e-8, -0.00298805525286353),
        (1e5, 5e-8, -0.028853124546904082),
        (1e4, 1e-6, -0.055607564126568226),
    ],
)
def test_dead_time_alone_fakes_a_residual_and_the_correction_takes_it_away(
    rate_hz: float, dead_time_s: float, expected: float
) -> None:
    """Derived for the exact model; named the key systematic in Found. Phys. 42, 742 (2012)."""
    kind = "non-paralysable"
    seen = {name: seen_rate_hz(rate_hz * rate, dead_time_s, kind) for name, rate in CENTRE.items()}

    corrected = {name: true_rate_hz(rate, dead_time_s, kind) for name, rate in seen.items()}

    assert residual(seen, 1.0).kappa == pytest.approx(expected, rel=1e-9)
    assert abs(residual(corrected, 1.0).kappa) < 1e-12


@pytest.mark.parametrize(
    ("kind", "expected"),
    [("non-paralysable", -0.0006660746825225043), ("paralysable", -0.0006666296941188684)],
)
def test_dead_time_at_a_thousandth_of_the_fullest_opening(kind: str, expected: float) -> None:
    """Derived: rate of ABC times dead time 1e-3; first order -2/3 of it; divided by the observed delta."""
    seen = {name: seen_rate_hz(rate / 9, 1e-3, kind) for name, rate in CENTRE.items()}

    found = residual(seen, 1.0)

    assert found.kappa == pytest.approx(expected, rel=1e-9)


def test_without_pairwise_interference_kappa_has_heavy_tails() -> None:
    """Derived from 20 000 Poisson draws: spread 0.76; a heavy tail, so 20 %."""
    mean = [1000, 2000, 2000, 3000, 2000, 3000, 3000, 4000]
    draws = np.random.default_rng(41).poisson(mean, (20_000, 8))

    found = residual({name: draws[:, mask] for mask, name in enumerate(names(3))}, 1.0)

    assert found.kappa.std() == pytest.approx(0.76, rel=0.2)
    assert np.mean(found.delta < 6 * np.sqrt(20_000)) > 0.99  # such a kappa is not printed


def test_the_variance_of_epsilon_for_equal_dwell() -> None:
    """Derived: background 0.02 of one slit, eight live seconds in all."""
    counts = {name: rate + 0.02 for name, rate in CENTRE.items()}

    assert residual(counts, 1.0).epsilon_se ** 2 == pytest.approx(24.159999999999997, rel=1e-12)


def test_the_ideal_night_of_a_billion_counts() -> None:
    """Derived: slits of width 1, pitch 3, 41 positions to 0.8/width, background 0.02, equal dwell."""
    angles = np.arcsin(np.linspace(-0.8, 0.8, 41))
    rates = np.stack(
        [
            slit_pattern(angles, 1.0, [3.0 * slit for slit in range(3) if mask >> slit & 1], [1.0] * n) + 0.02
            for mask in range(8)
            for n in [mask.bit_count()]
        ],
        axis=-1,
    )
    weights, signs = planned_weights(rates, range(8), 3)
    dwell_s = 1e9 / rates.sum()
    patterns = {name: rates[:, mask] for mask, name in enumerate(names(3))}

    value, se = kappa(patterns, {name: rate / dwell_s for name, rate in patterns.items()}, weights, signs)

    assert abs(value) < 1e-12
    assert se == pytest.approx(9.06e-5, rel=1e-3)
    assert se * sqrt(1e9) == pytest.approx(2.8646, abs=5e-5)


def centre(slits: int) -> dict[str, float]:
    """Return the intensities of equal slits at the centre."""
    return {name: 0.0 if name == "none" else float(len(name) ** 2) for name in names(slits)}


@pytest.mark.parametrize(
    ("slits", "total", "delta", "sd_root_n", "highest"),
    [(2, 6, 2, 3.0, 2.0), (3, 24, 6, 4.0, 0.0), (4, 80, 12, 20 / 3, 0.0), (5, 240, 20, 12.0, 0.0)],
)
def test_two_to_five_equal_slits_at_the_centre(
    slits: int, total: float, delta: float, sd_root_n: float, highest: float
) -> None:
    """Derived: sum of rates k(k+1) 2^(k-2), delta k(k-1), sd(epsilon)/delta sqrt(N) = 2^(k-2) (k+1)/(k-1)."""
    rates = centre(slits)

    found = residual(rates, 1.0)

    assert sum(rates.values()) == total
    assert (found.epsilon, found.delta) == pytest.approx((highest, delta), abs=1e-12)
    assert found.epsilon_se / found.delta * sqrt(total) == pytest.approx(sd_root_n, rel=1e-12)


def test_four_slits_have_these_covariances_between_terms() -> None:
    """Derived: cov(I_S, I_T) = (-1)^(|S|+|T|) times the sum of var(P_U) over U in S and T; rates |S|^2."""
    higher = [
        name for name in names(4) if len(name) >= 3 and name != "none"
    ]  # three slits by three, then all
    rates = centre(4)
    gradient = np.array(
        [[terms(rates | {u: 1.0 + rates[u]}, 4)[t] - terms(rates, 4)[t] for u in rates] for t in higher]
    )

    covariance = gradient @ np.diag(list(rates.values())) @ gradient.T

    expected = np.full((5, 5), 6.0) + 18.0 * np.eye(5)
    expected[4, :], expected[:, 4], expected[4, 4] = -24.0, -24.0, 80.0
    assert covariance == pytest.approx(expected, rel=1e-12)
