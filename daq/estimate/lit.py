"""Lit: how a mask is lit, from the patterns of one and two slits."""

from __future__ import annotations

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.cuts import Light, Mask, patterns

STEPS = 20
SETTLED = 1e-4  # of a standard error


def light_of(mask: Mask, rates: FloatArray, variances: FloatArray) -> Light:
    """Return the light that fits rates (J, K) behind openings of at most two slits best, cuts as measured.

    Notes
    -----
    Gauss-Newton from a start without a search: amplitudes from the single slits, phases and visibilities of
    the pairs by linear least squares. Openings of three and more slits, whose rates the residual is made
    from, are not looked at.
    """
    few = np.array([int(opening).bit_count() <= 2 for opening in mask.openings])
    weight = np.where(few & (variances > 0), 1 / np.where(variances > 0, variances, 1.0), 0.0)
    vector, geometry = _start(mask, rates).vector, mask.measured
    for _ in range(STEPS):
        expected, slopes = patterns(mask, geometry, Light.of(vector, mask.slits))
        design = slopes[..., len(geometry) :].reshape(weight.size, -1)
        inverse = np.linalg.inv(design.T @ (weight.reshape(-1, 1) * design))
        step = inverse @ (design.T @ (weight * (rates - expected)).ravel())
        vector = vector + np.clip(step, -0.5, 0.5 * np.maximum(1, np.abs(vector)))
        if np.max(np.abs(step) / np.sqrt(np.diag(inverse))) < SETTLED:
            break
    return Light.of(vector, mask.slits)


def _start(mask: Mask, rates: FloatArray) -> Light:
    """Return a first guess: single slits give the amplitudes, pairs their phases and visibilities."""
    column = {int(opening): at for at, opening in enumerate(mask.openings)}
    ones, quiet = np.ones(mask.slits), np.zeros(mask.slits)
    even = Light(ones, quiet, np.ones(len(mask.pairs)), 0.0)
    unit, _ = patterns(mask, mask.measured, even)
    dark = rates[:, column[0]]
    amplitude = np.array(
        [
            np.sqrt(
                max(np.sum(rates[:, column[1 << slit]] - dark) / np.sum(unit[:, column[1 << slit]]), 1e-30)
            )
            for slit in range(mask.slits)
        ]
    )
    turns = [_turn(mask, rates, amplitude, pair, column) for pair in mask.pairs]
    phase = np.concatenate(
        [[0.0], [-np.angle(turns[mask.pairs.index((0, s))]) for s in range(1, mask.slits)]]
    )
    return Light(amplitude, phase, np.clip(np.abs(turns), 0.05, 1.0), float(dark.mean()))


def _turn(
    mask: Mask, rates: FloatArray, amplitude: FloatArray, pair: tuple[int, int], column: dict[int, int]
) -> complex:
    """Return visibility and phase of a pair as one number, from its interference term."""
    one, other = pair
    both = column[(1 << one) | (1 << other)]
    term = rates[:, both] - rates[:, column[1 << one]] - rates[:, column[1 << other]] + rates[:, column[0]]
    shapes = []
    for angle in (0.0, np.pi / 2):
        phase = np.zeros(mask.slits)
        phase[other] = -angle
        if other == 0:
            raise ValueError("a pair has its first slit first")
        light = Light(amplitude, phase, np.ones(len(mask.pairs)), 0.0)
        expected, _ = patterns(mask, mask.measured, light)
        shapes.append(expected[:, both] - expected[:, column[1 << one]] - expected[:, column[1 << other]])
    along = np.linalg.lstsq(np.stack(shapes, axis=-1), term, rcond=None)[0]
    return complex(along[0] + 1j * along[1])
