"""Slit diffraction in print against the summed wavelets of the simulated bench."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import fresnel

from simulators.optics import POINTS, FloatArray, intensity

# A far field: pi (width/2)^2 / (wavelength distance) = 8e-7 rad of curvature over a slit, angles below 2e-3.
WAVELENGTH_M, DISTANCE_M, WIDTH_M = 1e-6, 1e6, 1e-3


def midpoint_error(phase_rad: float) -> float:
    """Return the relative error of an intensity summed over a slit with this phase from edge to edge."""
    return 2 * (phase_rad / POINTS) ** 2 / 24


def far_field(phase_rad: FloatArray | float, centres_m: list[float], width_m: float) -> FloatArray:
    """Return intensities where neighbours one `WIDTH_M` apart differ by a phase, one slit ahead = 1."""
    angle = np.atleast_1d(phase_rad) * WAVELENGTH_M / (2 * np.pi * WIDTH_M)
    position_m = DISTANCE_M * np.tan(np.arcsin(angle))
    slits = [(centre_m, width_m) for centre_m in centres_m]
    ahead = intensity(np.zeros(1), [(0.0, width_m)], WAVELENGTH_M, DISTANCE_M)
    return intensity(position_m, slits, WAVELENGTH_M, DISTANCE_M) / ahead


# "Principles of Optics", sect. 8.5, prints 0.04718, 0.01648, 0.00834 (from memory); recomputed from
# (sin x / x)^2 at the roots of tan x = x to the digits given here.
@pytest.mark.parametrize(
    ("place", "height"), [(4.493409, 0.0471904), (7.725252, 0.0164800), (10.904122, 0.0083403)]
)
def test_secondary_maxima_of_one_slit_are_those_in_print(place: float, height: float) -> None:
    around = 2 * place + np.linspace(-0.02, 0.02, 81)

    found = far_field(around, [0.0], WIDTH_M)

    printed = 0.5e-7 + 0.5e-7  # the digits given, and as much for the grid of places
    assert abs(found.max() - height) < height * midpoint_error(2 * place) + printed
    assert around[found.argmax()] / 2 == pytest.approx(place, abs=0.25e-3)  # half a step


# "Principles of Optics", sect. 8.6: the factor (sin(N d/2) / (N sin(d/2)))^2 of N equal slits; from memory.
@pytest.mark.parametrize(
    ("slits", "phase", "height"), [(3, np.pi, 1 / 9), (3, 2 * np.pi / 3, 0.0), (5, 1.8234778, 0.0625)]
)
def test_side_maxima_and_zeros_of_several_slits_are_those_in_print(
    slits: int, phase: float, height: float
) -> None:
    centres_m = [WIDTH_M * (slit - (slits - 1) / 2) for slit in range(slits)]
    narrow_m = WIDTH_M / 1000  # its own pattern falls by phase^2 / 12e6

    found = far_field(phase, centres_m, narrow_m)[0] / slits**2

    # curvature over the outermost slits: pi (2 WIDTH_M)^2 / (wavelength distance) = 1.3e-5 rad
    assert found == pytest.approx(height, abs=2e-5)


def test_three_slits_follow_the_far_field_formula() -> None:
    phase = np.linspace(-25.0, 25.0, 1001)
    centres_m = [-3 * WIDTH_M, 0.0, 3 * WIDTH_M]

    found = far_field(phase, centres_m, WIDTH_M)

    formula = np.sinc(phase / (2 * np.pi)) ** 2 * (1 + 2 * np.cos(3 * phase)) ** 2
    # curvature over the outermost slits, pi (3 WIDTH_M)^2 / (wavelength distance), turns the two outer
    # amplitudes against the inner one: at most 2 * 3 * 2 * that angle of the single slit's intensity
    curvature = np.pi * (3.5 * WIDTH_M) ** 2 / (WAVELENGTH_M * DISTANCE_M)
    assert np.allclose(found, formula, rtol=midpoint_error(25.0), atol=12 * curvature)


def test_a_wide_slit_near_by_follows_the_fresnel_integrals() -> None:
    wavelength_m, distance_m, width_m = 500e-9, 1.0, 1e-3
    position_m = np.linspace(-2e-3, 2e-3, 401)

    found = intensity(position_m, [(0.0, width_m)], wavelength_m, distance_m)

    # "Handbook of Mathematical Functions", sect. 7.3, pi/2 t^2 convention; paraxial phase error below
    # (2 pi / wavelength) (2.5e-3 m)^4 / 8 = 6e-5 rad, and the midpoint sum's at the steepest phase
    scale = np.sqrt(2 / (wavelength_m * distance_m))
    upper, lower = fresnel(scale * (position_m + width_m / 2)), fresnel(scale * (position_m - width_m / 2))
    formula = ((upper[0] - lower[0]) ** 2 + (upper[1] - lower[1]) ** 2) / scale**2
    steepest = 2 * np.pi * width_m * 2.5e-3 / (wavelength_m * distance_m)
    assert np.allclose(found, formula, rtol=0, atol=formula.max() * (midpoint_error(steepest) + 2 * 6e-5))
