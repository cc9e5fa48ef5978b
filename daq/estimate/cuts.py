"""Cuts: the patterns behind slits that were cut apart for each opening, and their slope by every cut."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import numpy as np

from daq import openings as names
from daq.estimate.arrays import FloatArray, IntArray
from daq.estimate.loads import Instance

ComplexArray = np.typing.NDArray[np.complex128]


@dataclass(frozen=True, slots=True)
class Mask:
    """The cuts of a mask and where they are looked at.

    `openings` (K) bit masks; `cuts`; `sine` (J) of the angle over the wavelength [1/m]; `bend` [1/m^2]: the
    phase that a slit off the axis gains is bend times its place squared.
    """

    openings: IntArray
    slits: int
    cuts: tuple[Instance, ...]
    sine: FloatArray
    bend: float

    @property
    def letters(self) -> tuple[str, ...]:
        """The slits in order."""
        return tuple(names.LETTERS[: self.slits])

    @property
    def pairs(self) -> tuple[tuple[int, int], ...]:
        """The pairs of slits, as indices."""
        return tuple(combinations(range(self.slits), 2))

    @property
    def uncertain(self) -> IntArray:
        """Which geometry parameters (centres, then widths) have an uncertainty, as indices."""
        return np.flatnonzero(self.sigma > 0)

    @property
    def sigma(self) -> FloatArray:
        """The uncertainty of every geometry parameter: centres, then widths [m]."""
        return np.array([one.centre_u_m for one in self.cuts] + [one.width_u_m for one in self.cuts])

    @property
    def measured(self) -> FloatArray:
        """Every geometry parameter as it was measured: centres, then widths [m]."""
        return np.array([one.centre_m for one in self.cuts] + [one.width_m for one in self.cuts])

    def shows(self, opening: int) -> list[tuple[int, int]]:
        """Return the slits of an opening, as (slit, cut) indices."""
        return [
            (self.letters.index(one.letter), at)
            for at, one in enumerate(self.cuts)
            if opening in one.openings
        ]


@dataclass(frozen=True, slots=True)
class Light:
    """How a mask is lit: amplitude, phase of each slit, visibility of each pair, rate of the background."""

    amplitude: FloatArray
    phase_rad: FloatArray
    visibility: FloatArray
    background_hz: float

    @property
    def vector(self) -> FloatArray:
        """As parameters: log amplitudes, phases but the first, visibilities, background."""
        return np.concatenate(
            [np.log(self.amplitude), self.phase_rad[1:], self.visibility, [self.background_hz]]
        )

    @classmethod
    def of(cls, vector: FloatArray, slits: int) -> Light:
        """Return the light of a vector of parameters."""
        return cls(
            np.exp(vector[:slits]),
            np.concatenate([[0.0], vector[slits : 2 * slits - 1]]),
            vector[2 * slits - 1 : -1],
            float(vector[-1]),
        )


def mask_of(
    openings: IntArray, slits: int, cuts: tuple[Instance, ...], angle_rad: FloatArray, wavelength_m: float,
    distance_m: float,
) -> Mask:  # fmt: skip
    """Return a mask seen under angles (J) from a distance."""
    return Mask(openings, slits, cuts, np.sin(angle_rad) / wavelength_m, np.pi / (wavelength_m * distance_m))


def patterns(mask: Mask, geometry_m: FloatArray, light: Light) -> tuple[FloatArray, FloatArray]:
    """Return rates (J, K), and their derivatives (J, K, P) by geometry, then by light.

    Parameters
    ----------
    geometry_m
        Centres, then widths of the cuts.

    Notes
    -----
    Fraunhofer's amplitude of each cut about its own axis, with the phase of its place (Fresnel's first
    terms); the amplitude is that of the light times width over the slit's mean width. No slit acts on
    another.

    References
    ----------
    .. [1] "Principles of Optics", 7th ed., sect. 8.5, from memory.
    """
    count, slits = len(mask.cuts), mask.slits
    fields, by_centre, by_width = _fields(mask, geometry_m, light)
    offset = 2 * count
    rates = np.full((len(mask.sine), len(mask.openings)), light.background_hz)
    slopes = np.zeros((*rates.shape, offset + 2 * slits - 1 + len(mask.pairs) + 1))
    slopes[..., -1] = 1.0
    for column, opening in enumerate(mask.openings.tolist()):
        shown = mask.shows(opening)
        for slit, cut in shown:
            around = _around(mask, light, fields, shown, slit)
            pull = 2 * around.conj()
            rates[:, column] += (fields[cut] * around.conj()).real
            slopes[:, column, cut] = (by_centre[cut] * pull).real
            slopes[:, column, count + cut] = (by_width[cut] * pull).real
            slopes[:, column, offset + slit] = (fields[cut] * pull).real
            if slit:
                slopes[:, column, offset + slits + slit - 1] = (1j * fields[cut] * pull).real
        for at, pair in enumerate(mask.pairs):
            cuts = [cut for slit, cut in shown if slit in pair]
            if len(cuts) == 2:
                slopes[:, column, offset + 2 * slits - 1 + at] = (
                    2 * (fields[cuts[0]] * fields[cuts[1]].conj()).real
                )
    return rates, slopes


def _fields(
    mask: Mask, geometry_m: FloatArray, light: Light
) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    """Return the amplitude (cuts, J) behind every cut, and its derivatives by centre and by width."""
    centre, width = geometry_m.reshape(2, -1, 1)
    slit = np.array([mask.letters.index(one.letter) for one in mask.cuts])
    widths = np.array([one.width_m for one in mask.cuts])
    mean = np.array([widths[slit == slit_of].mean() for slit_of in slit])[:, None]
    lit = (light.amplitude * np.exp(1j * light.phase_rad))[slit][:, None] / mean
    turn = np.exp(1j * (mask.bend * centre**2 - 2 * np.pi * mask.sine * centre))
    own = mask.sine - mask.bend / np.pi * centre  # a slit off the axis looks straight ahead, not at the axis
    field = lit * width * np.sinc(width * own) * turn
    by_centre = 1j * (2 * mask.bend * centre - 2 * np.pi * mask.sine) * field
    return field, by_centre, lit * np.cos(np.pi * width * own) * turn


def _around(
    mask: Mask, light: Light, fields: ComplexArray, shown: list[tuple[int, int]], slit: int
) -> ComplexArray:
    """Return the sum of the amplitudes that a slit of an opening interferes with, itself too."""
    total = np.zeros(fields.shape[1], complex)
    for other, cut in shown:
        pair = (min(slit, other), max(slit, other))
        total += fields[cut] * (1.0 if slit == other else light.visibility[mask.pairs.index(pair)])
    return total
