"""Optics: what falls on the detector behind open slits, by summing wavelets point by point."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]

POINTS = 512


def amplitude(
    position_m: FloatArray, centre_m: float, width_m: float, wavelength_m: float, distance_m: float
) -> ComplexArray:
    """Return the amplitude behind one slit, `width_m` straight ahead of a narrow slit.

    Every point of the slit sends a cylindrical wavelet exp(ikr)/sqrt(r) over its own path r.

    Parameters
    ----------
    position_m
        Detector positions [m], shape (J,).
    centre_m, width_m
        The slit [m].
    wavelength_m, distance_m
        Wavelength, and distance from mask to detector [m].

    Returns
    -------
    ComplexArray
        Shape (J,).

    Notes
    -----
    Midpoint sum over `POINTS` points: with a phase step phi between neighbours the amplitude is too large
    by about phi**2 / 24.  The obliquity factor is left out (angles of a few degrees).
    """
    points_m = centre_m + width_m * ((np.arange(POINTS) + 0.5) / POINTS - 0.5)
    aside_m = np.asarray(position_m, dtype=float)[:, np.newaxis] - points_m
    path_m = np.hypot(distance_m, aside_m)
    # path - distance, without the loss of digits
    detour_m = aside_m**2 / (path_m + distance_m)
    wavelets = np.exp(2j * np.pi / wavelength_m * detour_m) * np.sqrt(distance_m / path_m)
    return wavelets.sum(axis=1) * (width_m / POINTS)


def intensity(
    position_m: FloatArray, slits: Iterable[tuple[float, float]], wavelength_m: float, distance_m: float
) -> FloatArray:
    """Return the intensity behind open slits, in the unit of `amplitude` squared.

    Parameters
    ----------
    position_m
        Detector positions [m], shape (J,).
    slits
        Centre and width of every open slit [m]; none gives darkness.
    wavelength_m, distance_m
        Wavelength, and distance from mask to detector [m].
    """
    total = np.zeros(np.shape(position_m), dtype=complex)
    for centre_m, width_m in slits:
        total += amplitude(position_m, centre_m, width_m, wavelength_m, distance_m)
    return np.abs(total) ** 2
