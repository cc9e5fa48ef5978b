"""Slits: the true slits of a bench, and the light behind those that an opening shows."""

from __future__ import annotations

from collections.abc import Mapping
from itertools import combinations

import numpy as np

from daq import openings
from daq.description import Rig
from daq.description.rig import Slit
from simulators.draws import generator
from simulators.optics import ComplexArray, amplitude
from simulators.settings import LightSettings

Cut = tuple[float, float]  # centre and width [m]


class Slits:
    """What every opening truly shows: slits as they were cut, lit as they are.

    Parameters
    ----------
    rig
        The slits as they were described and measured.
    light
        Illumination, visibility, creeping waves, and how far the true slits are from the described ones.
    seed
        Of the true slits.
    """

    def __init__(self, rig: Rig, light: LightSettings, seed: int) -> None:
        self._rig, self._light = rig, light
        self._lit: dict[str, complex] = {
            letter: light.amplitude.get(letter, 1.0) * np.exp(1j * light.phase_rad.get(letter, 0.0))
            for letter in rig.slits
        }
        shared: dict[str, Cut] = {
            letter: _true(slit, letter, light.cut_sigma, seed) for letter, slit in rig.slits.items()
        }
        self._cuts: dict[int, dict[str, Cut]] = {}
        for opening in rig.opening_masks:
            name = openings.name(opening)
            own = rig.mask.openings[name].cuts
            self._cuts[opening] = {
                letter: _true(slit, f"{letter} of {name}", light.cut_sigma, seed)
                if letter in own
                else shared[letter]
                for letter, slit in rig.slits_of(opening).items()
            }

    def reference(self) -> float:
        """Return the intensity of the described first slit alone, straight ahead, evenly lit."""
        first = self._rig.slits["A"]
        return abs(self._amplitude(first.centre_m, (first.centre_m, first.width_m))) ** 2

    def intensity(self, opening: int, position_m: float) -> float:
        """Return the intensity behind an opening, in the unit of `reference`.

        Notes
        -----
        A creeping wave leaves the mask where it meets a second open slit: for each pair it adds a share
        `loop` of the mean of both slits' amplitudes. That the waves of an opening are more than the sum of
        those of its slits makes a third-order term.
        """
        waves = {
            letter: self._lit[letter] * self._amplitude(position_m, cut)
            for letter, cut in self._cuts[opening].items()
        }
        if self._light.loop and len(waves) > 1:
            waves["loops"] = self._creeping(waves)
        if not self._light.visibility:
            return abs(sum(waves.values(), start=0j)) ** 2
        total = sum((abs(wave) ** 2 for wave in waves.values()), start=0.0)
        for (one, first), (other, second) in combinations(waves.items(), 2):
            visibility = self._light.visibility.get(one + other, 1.0)
            total += 2 * visibility * (first.conjugate() * second).real
        return float(total)

    def _creeping(self, waves: Mapping[str, complex]) -> complex:
        turn = self._light.loop * np.exp(1j * self._light.loop_phase_rad)
        return complex(sum(turn * (first + second) / 2 for first, second in combinations(waves.values(), 2)))

    def _amplitude(self, position_m: float, cut: Cut) -> complex:
        geometry = self._rig.geometry
        wave: ComplexArray = amplitude(
            np.array([position_m]), *cut, geometry.wavelength_m, geometry.distance_m
        )
        return complex(wave[0])


def _true(slit: Slit, name: str, sigma: float, seed: int) -> Cut:
    """Return a slit as it was truly cut: drawn about the described one, by so many of its uncertainties."""
    if not sigma:
        return slit.centre_m, slit.width_m
    centre, width = generator(seed, f"slit {name}", 0).standard_normal(2) * sigma
    return slit.centre_m + centre * slit.centre_u_m, slit.width_m + width * slit.width_u_m
