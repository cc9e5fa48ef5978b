"""Slits: diffraction patterns, and the template that fixes weights and signs before the first count."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from numpy.typing import ArrayLike

from daq import openings
from daq.estimate.arrays import FloatArray, IntArray
from daq.estimate.contrast import contrast, epsilon_and_delta

# CODATA 2022: Planck constant [J s] and Boltzmann constant [J/K], exact; atomic mass constant [kg].
PLANCK_J_S = 6.62607015e-34
BOLTZMANN_J_K = 1.380649e-23
MASS_UNIT_KG = 1.66053906892e-27

Slits = Mapping[str, tuple[float, float]]  # letter -> (centre_m, width_m)


def slit_pattern(
    position_rad: Any,
    wavelength_m: float,
    centres_m: Sequence[float],
    widths_m: Sequence[float],
    amplitudes: Sequence[complex] | None = None,
) -> Any:
    """Return the Fraunhofer intensity behind slits; one slit of amplitude 1 alone gives 1 at zero angle.

    Parameters
    ----------
    position_rad
        Angle from the axis [rad], any shape.
    amplitudes
        Complex amplitude of each slit at zero angle; all 1 if not given, whatever the widths.

    Notes
    -----
    Scalar far field behind thin slits: no slit acts on another, so every third-order term is zero.

    References
    ----------
    .. [1] "Principles of Optics", 7th ed., sect. 8.5 (single slit) and 8.6 (grating), from memory.
    """
    u = np.sin(np.asarray(position_rad, float)) / wavelength_m
    strengths = [1.0] * len(centres_m) if amplitudes is None else amplitudes
    field = sum(
        (
            strength * np.sinc(width * u) * np.exp(2j * np.pi * u * centre)
            for centre, width, strength in zip(centres_m, widths_m, strengths, strict=True)
        ),
        start=np.zeros(u.shape, complex),
    )
    return (np.abs(field) ** 2)[()]


def expected_rates_hz(
    slits_of: Mapping[int, Slits],
    positions_mm: ArrayLike,
    wavelength_m: float,
    distance_m: float,
    single_slit_rate_hz: float,
    background_rate_hz: float,
) -> FloatArray:
    """Return the rates that a plan expects, (J, K), openings in ascending order of their bit masks.

    Parameters
    ----------
    slits_of
        Opening (bit mask) -> the slit instances it shows, letter -> (centre, width).
    single_slit_rate_hz
        Rate of the first slit alone at the middle of its pattern, without background.
    background_rate_hz
        What `none` counts; every other opening counts it too.

    Notes
    -----
    All slits are lit alike, so a slit's amplitude is proportional to its width.
    """
    angle_rad = np.arctan(np.asarray(positions_mm, float) * 1e-3 / distance_m)
    reference_m = _first_width_m(slits_of)
    columns = [_intensity(angle_rad, wavelength_m, slits_of[mask], reference_m) for mask in sorted(slits_of)]
    return single_slit_rate_hz * np.stack(columns, axis=-1) + background_rate_hz


def planned_weights(
    rates_hz: ArrayLike,
    openings: Sequence[int] | IntArray,
    slits: int,
    dwell_s: FloatArray | None = None,
) -> tuple[FloatArray, dict[str, FloatArray]]:
    """Return position weights (sum 1) and planned signs of the pairwise terms, from expected rates (J, K).

    Parameters
    ----------
    dwell_s
        Counting time in any common unit, (J, K); the same everywhere when None.

    Notes
    -----
    a_j = delta_j / var(epsilon_j): the weights of least variance for a kappa that is the same everywhere.
    They must not be made from the counts that they weigh.

    Raises
    ------
    ValueError
        If no pairwise interference is expected at any position.
    """
    what = contrast(tuple(map(int, openings)), slits)
    rates = np.asarray(rates_hz, float)
    _, delta = epsilon_and_delta(rates, what, "pairwise")
    variance = (rates if dwell_s is None else rates / dwell_s) @ what.residual**2
    weights = np.divide(delta, variance, out=np.zeros_like(delta), where=variance > 0)
    if not weights.sum() > 0:
        raise ValueError("no pairwise interference is expected at any position: kappa would have no divisor")
    signs = np.where(rates @ what.pairs.T < 0, -1.0, 1.0)
    return weights / weights.sum(), dict(zip(what.pair_names, signs.T, strict=True))


def wavelength_m(mass_u: float, speed_m_s: float) -> float:
    """Return the de Broglie wavelength of a slow particle [m], h/(m v), not relativistic."""
    return PLANCK_J_S / (mass_u * MASS_UNIT_KG * speed_m_s)


def jet_speed_m_s(mass_u: float, temperature_k: float) -> float:
    """Return the terminal speed of a supersonic jet of monatomic gas [m/s], sqrt(5 k T/m).

    References
    ----------
    .. [1] "Atomic and Molecular Beam Methods", vol. 1, from memory.
    """
    return float(np.sqrt(5 * BOLTZMANN_J_K * temperature_k / (mass_u * MASS_UNIT_KG)))


def _intensity(angle_rad: FloatArray, wavelength_m: float, slits: Slits, reference_m: float) -> FloatArray:
    centres = [centre for centre, _ in slits.values()]
    widths = [width for _, width in slits.values()]
    strengths = [width / reference_m for width in widths]
    return np.asarray(slit_pattern(angle_rad, wavelength_m, centres, widths, strengths))


def _first_width_m(slits_of: Mapping[int, Slits]) -> float:
    """Return the width of the first slit, in the opening that shows it alone."""
    if 1 not in slits_of:
        raise ValueError(f"opening {openings.name(1)!r} is missing: the single-slit rate refers to it")
    return slits_of[1][openings.name(1)][1]
