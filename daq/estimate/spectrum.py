"""Spectrum: epsilon over position as frequencies, and the frequencies that imperfect slits predict."""

from __future__ import annotations

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.cuts import Mask


def spectrum(
    values: FloatArray, variance: FloatArray, sine: FloatArray, frequency_m: FloatArray
) -> FloatArray:
    """Return the power of values (J) at frequencies, 1 on average where there is only counting noise.

    Parameters
    ----------
    sine
        Sine of the angle over the wavelength by position [1/m].
    frequency_m
        Frequencies as distances in the mask [m]: two slits so far apart make fringes of this frequency.

    References
    ----------
    .. [1] Common practice: the periodogram of values divided by their standard errors.
    """
    turn = np.exp(-2j * np.pi * np.outer(frequency_m, sine))
    return np.asarray(np.abs(turn @ (values / np.sqrt(variance))) ** 2 / len(values))


def frequencies(sine: FloatArray) -> FloatArray:
    """Return the frequencies that evenly spaced positions tell apart, from zero on [m]."""
    span = float(np.ptp(sine)) * len(sine) / max(len(sine) - 1, 1)
    return np.arange(len(sine) // 2 + 1) / span


def lines(mask: Mask) -> dict[str, float]:
    """Return where imperfect cuts show: at zero, and at the distance of every two slits, by name [m]."""
    centre = {
        letter: float(np.mean([one.centre_m for one in mask.cuts if one.letter == letter]))
        for letter in mask.letters
    }
    found = {"each slit": 0.0}
    for one, other in mask.pairs:
        first, second = mask.letters[one], mask.letters[other]
        found[f"{first} and {second}"] = abs(centre[second] - centre[first])
    return found
