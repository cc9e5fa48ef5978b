"""Diffraction and matter waves: values in print."""

from __future__ import annotations

from math import asin, degrees, pi, radians, sqrt

import numpy as np
import pytest

from daq.estimate import expected_rates_hz, jet_speed_m_s, slit_pattern, wavelength_m

HELIUM_U = 4.00260325413  # Chin. Phys. C 45, 030003 (2021), AME2020; from memory
ELECTRON_U = 0.0005485799090441  # CODATA 2022
CHARGE_C = 1.602176634e-19  # exact in the SI
MASS_UNIT_KG = 1.66053906892e-27  # CODATA 2022


@pytest.mark.parametrize(
    ("x", "intensity"), [(4.493409, 0.0471904), (7.725252, 0.0164800), (10.904122, 0.0083403)]
)
def test_secondary_maxima_of_one_slit(x: float, intensity: float) -> None:
    """From "Principles of Optics", sect. 8.5 (0.04718, 0.01648, 0.00834); from memory."""
    angle = asin(x / pi * 1e-3)  # slit of a thousand wavelengths

    assert slit_pattern(angle, 1.0, [0.0], [1000.0]) == pytest.approx(intensity, abs=1e-7)


def test_one_slit_is_dark_where_the_sine_is_wavelength_over_width() -> None:
    """632.8 nm, 0.100 mm: 0.36257 degrees, 6.3281 mm at 1 m; elementary."""
    angle = asin(632.8e-9 / 0.1e-3)

    assert degrees(angle) == pytest.approx(0.3625701, abs=5e-8)
    assert np.tan(angle) * 1e3 == pytest.approx(6.3281267, abs=5e-8)
    assert slit_pattern(radians(0.3625701), 632.8e-9, [0.0], [0.1e-3]) < 1e-12


@pytest.mark.parametrize(
    ("slits", "phase", "share"),
    [(3, pi, 0.1111111111), (4, 2.3005239830, 0.0740740741), (5, 1.8234778, 0.0625)],
)
def test_subsidiary_maxima_of_a_grating(slits: int, phase: float, share: float) -> None:
    """From "Principles of Optics", sect. 8.6; from memory. For 4 the phase is arccos(-2/3)."""

    def at(angle_rad: float) -> float:
        return float(slit_pattern(angle_rad, 1.0, [10.0 * k for k in range(slits)], [1e-6] * slits))

    peak = at(asin(phase / (2 * pi * 10)))

    assert peak / slits**2 == pytest.approx(share, abs=1e-7)
    assert peak > max(at(asin((phase + step) / (2 * pi * 10))) for step in (-1e-3, 1e-3))


@pytest.mark.parametrize("phase", [2 * pi / 3, 4 * pi / 3])
def test_three_slits_are_dark_at_two_thirds_of_pi(phase: float) -> None:
    assert slit_pattern(asin(phase / 20 / pi), 1.0, [0.0, 10.0, 20.0], [1e-6] * 3) < 1e-20


def test_fringes_of_two_slits_on_a_screen() -> None:
    """632.8 nm, pitch 0.25 mm: 2.5312 mm at 1 m; elementary, small angle."""
    cuts = {0: {}, 1: {"A": (0.0, 1e-5)}, 3: {"A": (0.0, 1e-5), "B": (0.25e-3, 1e-5)}}
    places_mm = np.linspace(2.4, 2.7, 3001)

    rates = expected_rates_hz(cuts, places_mm, 632.8e-9, 1.0, 1.0, 0.0)

    share = rates[:, 2] / rates[:, 1]  # the single-slit envelope taken out: maxima at whole fringes
    assert places_mm[np.argmax(share)] == pytest.approx(2.5312, abs=1e-4)


def test_the_wave_of_helium() -> None:
    """Derived: h/m = 9.9692936e-8 m2/s."""
    assert wavelength_m(HELIUM_U, 1000.0) * 1e12 == pytest.approx(99.69293620545746, rel=1e-7)


def test_the_jet_of_helium() -> None:
    """From "Atomic and Molecular Beam Methods", sqrt(5 k T/m); from memory, digits derived."""
    speed = jet_speed_m_s(HELIUM_U, 300.0)

    assert speed == pytest.approx(1765.18996, rel=1e-7)
    assert wavelength_m(HELIUM_U, speed) * 1e12 == pytest.approx(56.4771714, rel=1e-7)


@pytest.mark.parametrize(("temperature_k", "angstrom"), [(295.0, 0.56), (83.0, 1.03)])
def test_the_published_double_slit_of_metastable_helium(temperature_k: float, angstrom: float) -> None:
    """From "Young's double-slit experiment with atoms", Phys. Rev. Lett. 66, 2689 (1991).

    From memory; the beam is not an ideal jet: 5 %.
    """
    found = wavelength_m(HELIUM_U, jet_speed_m_s(HELIUM_U, temperature_k))

    assert found * 1e10 == pytest.approx(angstrom, rel=0.05)


def test_slow_electrons() -> None:
    """Derived: 600 V, not relativistic, 50.0686304 pm."""
    speed = sqrt(2 * CHARGE_C * 600 / (ELECTRON_U * MASS_UNIT_KG))

    assert wavelength_m(ELECTRON_U, speed) * 1e12 == pytest.approx(50.0686304, rel=1e-6)
