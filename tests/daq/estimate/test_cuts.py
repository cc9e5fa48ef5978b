"""Slits that were cut apart: the model's slopes, its limits, and what is left of a residual they make."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest

from daq.estimate import slit_pattern
from daq.estimate.contrast import contrast, epsilon_and_delta
from daq.estimate.cuts import Light, Mask, mask_of, patterns
from daq.estimate.fitted import fitted
from daq.estimate.lit import light_of
from daq.estimate.loads import Instance
from daq.estimate.marginal import marginal
from daq.estimate.spectrum import frequencies, lines, spectrum
from simulators.optics import intensity
from tests.studies import cuts as study

SINE = np.linspace(-0.8, 0.8, 41) / 100e-9
PLACE_M = {"A": -300e-9, "B": 0.0, "C": 300e-9}
LIGHT = Light(np.array([30.0, 31.0, 29.0]), np.array([0.0, 0.2, -0.3]), np.array([1.0, 0.98, 0.97]), 20.0)
LETTERS = ("", "A", "B", "AB", "C", "AC", "BC", "ABC")
WHAT = contrast(tuple(range(8)), 3)


def cut_apart(generator: np.random.Generator, sd_m: float = 1e-9, known_m: float = 0.3e-9) -> Mask:
    """Return a mask with slits of its own in every opening, off their places by so much."""
    cuts = []
    for opening in range(1, 8):
        for slit, letter in enumerate("ABC"):
            if opening >> slit & 1:
                centre, width = generator.normal([PLACE_M[letter], 100e-9], sd_m)
                cuts.append(
                    Instance(f"{letter} of {opening}", letter, (opening,), centre, width, known_m, known_m)
                )
    return Mask(np.arange(8), 3, tuple(cuts), SINE, 1e9)


def shared() -> Mask:
    """Return a mask that shows the same three slits in all its openings."""
    cuts = tuple(
        Instance(letter, letter, tuple(m for m in range(8) if letter in LETTERS[m]), place, 1e-7, 1e-9, 1e-9)
        for letter, place in PLACE_M.items()
    )  # fmt: skip
    return Mask(np.arange(8), 3, cuts, SINE, 0.0)


def of_residual(rates: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    return epsilon_and_delta(rates, WHAT, "pairwise")


@pytest.mark.parametrize("parameter", [2, 5, 9, 13, 16, 23, 24, 26, 27, 28, 29, 31, 32])
def test_slopes_are_those_of_finite_differences(parameter: int) -> None:
    mask = cut_apart(np.random.default_rng(1))
    vector = np.concatenate([mask.measured * 1e9, LIGHT.vector])  # nanometres, for one size of step
    step = np.zeros(len(vector))
    step[parameter] = 1e-5

    def rates(at: np.ndarray) -> np.ndarray:
        return patterns(mask, at[:24] / 1e9, Light.of(at[24:], 3))[0]

    slope = patterns(mask, mask.measured, LIGHT)[1][..., parameter] * (1e-9 if parameter < 24 else 1.0)

    numeric = (rates(vector + step) - rates(vector - step)) / 2e-5
    # a centre also turns its envelope by 1e-3 of what the phase does, which the slope leaves out
    assert np.abs(slope - numeric).max() < 3e-3 * np.abs(numeric).max()


def test_evenly_lit_shared_slits_have_the_pattern_of_textbooks() -> None:
    mask, light = shared(), Light(np.ones(3), np.zeros(3), np.ones(3), 0.0)

    rates, _ = patterns(mask, mask.measured, light)

    angle_rad = np.arcsin(SINE * 50e-12)
    assert rates[:, 7] == pytest.approx(slit_pattern(angle_rad, 50e-12, list(PLACE_M.values()), [1e-7] * 3))
    assert np.abs(rates @ WHAT.residual).max() < 1e-12


def test_near_slits_off_the_axis_the_model_is_that_of_wavelets() -> None:
    places_m, slits = np.linspace(-0.25e-3, 0.25e-3, 41), [(-240e-9, 80e-9), (0.0, 81e-9), (243e-9, 79e-9)]
    cuts = tuple(
        Instance(letter, letter, (7,), *slit, 0.0, 0.0) for letter, slit in zip("ABC", slits, strict=True)
    )
    mask = mask_of(np.array([7]), 3, cuts, np.arctan(places_m), 25e-12, 1.0)
    even = Light(np.array([width for _, width in slits]), np.zeros(3), np.ones(3), 0.0)

    rates, _ = patterns(mask, mask.measured, even)

    wavelets = intensity(places_m, slits, 25e-12, 1.0)
    assert np.abs(rates[:, 0] - wavelets).max() < 1e-4 * wavelets.max()


def test_the_light_is_found_from_one_and_two_slits() -> None:
    mask = cut_apart(np.random.default_rng(2))
    rates, _ = patterns(mask, mask.measured, LIGHT)
    rates[:, 7] *= 3.0  # what the residual is made from is not looked at

    found = light_of(mask, rates, rates * 1e-6)

    assert found.vector == pytest.approx(LIGHT.vector, rel=1e-6, abs=1e-6)


def test_a_residual_that_cuts_make_goes_away_and_a_true_one_stays() -> None:
    generator = np.random.default_rng(3)
    true = cut_apart(generator)
    rates, _ = patterns(true, true.measured, LIGHT)
    mask = replace(true, cuts=tuple(
        replace(one, centre_m=one.centre_m + shift, width_m=one.width_m + more)
        for one, shift, more in zip(true.cuts, *generator.normal(0, 0.3e-9, (2, 12)), strict=True)
    ))  # fmt: skip
    _, delta = of_residual(rates)
    for kappa in (0.0, 0.01):
        seen = rates.copy()
        seen[:, 7] += kappa * delta
        epsilon, _ = of_residual(seen)
        variance = 1e-6 * seen

        light = light_of(mask, seen, variance)
        found = marginal(mask, light, WHAT.residual, epsilon, delta, variance @ WHAT.residual**2)
        joint = fitted(mask, light, seen, variance, delta)

        assert np.abs(epsilon / delta).max() > 3e-3
        assert abs(found.kappa - kappa) < 4 * found.geometry_se < 1e-3
        assert abs(joint.kappa - kappa) < 4 * joint.se < 1e-3
        assert joint.fits


def test_the_fourth_order_of_four_slits_cut_apart_goes_away_too() -> None:
    generator, slits = np.random.default_rng(8), 4
    cut_m = generator.normal([0.0, 100e-9], 1e-9, (2**slits, slits, 2))
    cuts = tuple(
        Instance(
            f"{letter} of {opening}", letter, (opening,), cut_m[opening, slit, 0] + (slit - 1.5) * 300e-9,
            cut_m[opening, slit, 1], 0.3e-9, 0.3e-9,
        )
        for opening in range(1, 2**slits)
        for slit, letter in enumerate("ABCD")
        if opening >> slit & 1
    )  # fmt: skip
    mask = Mask(np.arange(2**slits), slits, cuts, SINE, 0.0)
    light = Light(np.full(slits, 30.0), np.array([0.0, 0.1, -0.2, 0.3]), np.ones(6), 20.0)
    rates, _ = patterns(mask, mask.measured, light)
    what = contrast(tuple(range(2**slits)), slits)
    epsilon, delta = epsilon_and_delta(rates, what, "pairwise")
    variance = 1e-6 * rates

    lit = light_of(mask, rates, variance)
    found = marginal(mask, lit, what.residual, epsilon, delta, variance @ what.residual**2)

    assert np.abs(epsilon / delta).max() > 3e-3
    assert abs(found.kappa) < 1e-6 and 0 < found.geometry_se < 1e-3
    assert abs(fitted(mask, lit, rates, variance, delta).kappa) < 1e-6


def test_without_uncertainty_the_marginal_is_the_best_contrast() -> None:
    generator = np.random.default_rng(4)
    mask = cut_apart(generator, known_m=0.0)
    rates, _ = patterns(mask, mask.measured, LIGHT)
    epsilon, delta = of_residual(rates)
    variance = rates @ WHAT.residual**2

    found = marginal(mask, LIGHT, WHAT.residual, epsilon, delta, variance)

    best = delta / variance
    assert found.geometry_se == 0.0
    assert found.weights == pytest.approx(best / (best @ delta))
    assert abs(found.kappa) < 1e-12 and found.counting_se == pytest.approx((best @ delta) ** -0.5)


def test_slits_that_all_openings_share_leave_no_trace() -> None:
    mask = shared()
    rates, _ = patterns(mask, mask.measured, LIGHT)
    full = replace(LIGHT, visibility=np.ones(3))
    epsilon, delta = of_residual(rates)

    found = marginal(mask, full, WHAT.residual, epsilon, delta, rates @ WHAT.residual**2)

    assert np.abs(found.from_cuts).max() < 1e-9 * delta.max()
    assert found.geometry_se < 1e-9


def test_a_level_of_each_position_takes_a_drifting_source_in() -> None:
    generator = np.random.default_rng(5)
    mask = cut_apart(generator, known_m=1e-11)
    rates, _ = patterns(mask, mask.measured, LIGHT)
    seen = rates * np.exp(0.01 * generator.normal(size=(41, 1)))
    _, delta = of_residual(seen)
    variance = 1e-5 * seen
    light = light_of(mask, seen, variance)

    stiff, free = (fitted(mask, light, seen, variance, delta, sd) for sd in (0.0, 0.1))

    assert not stiff.fits and free.fits
    assert abs(free.kappa) < free.se and free.chi2 < 0.01 * free.dof
    assert free.dof == stiff.dof - 40  # the amplitudes of the light are a common level too


def test_a_line_of_epsilon_stands_where_its_two_slits_are_apart() -> None:
    mask = cut_apart(np.random.default_rng(6))
    values = np.cos(2 * np.pi * 300e-9 * SINE)

    at = frequencies(SINE)
    power = spectrum(values, np.ones(41), SINE, at)

    assert at[np.argmax(power)] == pytest.approx(300e-9, abs=at[1] / 2)
    assert lines(mask)["A and C"] == pytest.approx(600e-9, abs=4e-9)
    assert spectrum(values, np.ones(41), SINE, np.array([300e-9]))[0] == pytest.approx(41 / 4, rel=0.1)


def test_counting_noise_has_power_one() -> None:
    noise = np.random.default_rng(7).normal(size=(400, 41))

    power = np.mean([spectrum(row, np.ones(41), SINE, frequencies(SINE)) for row in noise])

    assert power == pytest.approx(1.0, abs=4 / np.sqrt(400 * 20))


def test_a_few_masks_of_the_study() -> None:
    rows: dict[str, Any] = study.study(12)["rows"]

    for name in list(rows)[:2]:
        assert rows[name]["rms"] < 1.7e-4 * (1 + 4 / np.sqrt(24))
        assert rows[name]["joint_rms"] < 6e-5 * (1 + 4 / np.sqrt(24))
        assert 1e-3 < rows[name]["before_rms"] < 2e-2
    assert rows["AB seen 1 % of a fringe aside"]["flagged"] == 1.0
