"""Chip: the windows of the mask as they truly are, and where the mask truly stands behind its encoder."""

from __future__ import annotations

import math
from collections.abc import Iterator

from daq import openings
from daq.description import Rig
from simulators.draws import generator
from simulators.motion import NS, Leg
from simulators.settings import ChipSettings

SQRT2 = math.sqrt(2.0)


class Chip:
    """Which share of the beam passes which window, by the place of the mask.

    Parameters
    ----------
    rig
        The drawing: places of the openings, and of the key.
    settings
        How the true chip differs from the drawing, and how its stage moves.
    seed
        Of the places that the stage really comes to.
    """

    def __init__(self, rig: Rig, settings: ChipSettings, seed: int) -> None:
        self._settings, self._seed = settings, seed
        self._windows = dict(_windows(rig, settings))

    def shares(self, mask_mm: float) -> Iterator[tuple[int, float]]:
        """Yield every opening that gets light, and the share of the beam that passes its window."""
        half, edge = self._settings.window_mm / 2, self._settings.edge_mm * SQRT2
        for centre, opening in self._windows.items():
            off = mask_mm - centre
            if abs(off) < half + 8 * edge:
                yield opening, (math.erf((off + half) / edge) - math.erf((off - half) / edge)) / 2

    def off_mm(self, leg: Leg) -> float:
        """Return how far the mask stands from where its encoder says, after a leg: play, and chance."""
        play = math.copysign(self._settings.backlash_mm / 2, leg.stop_mm - leg.start_mm)
        if leg.start_mm == leg.stop_mm:
            play = 0.0
        if not self._settings.repeat_mm:
            return play
        chance = generator(self._seed, "mask place", leg.start_ns).standard_normal()
        return play + self._settings.repeat_mm * float(chance)

    def transient(self, leg: Leg, start_ns: int, stop_ns: int) -> float:
        """Return the mean factor of the light between two times after the mask has come to a stand."""
        size, time_s = self._settings.transient, self._settings.transient_s
        if not size or leg.start_mm == leg.stop_mm:
            return 1.0
        since_s, until_s = ((at_ns - leg.stop_ns) / NS for at_ns in (start_ns, stop_ns))
        if since_s < 0 or stop_ns <= start_ns:
            return 1.0
        faded = math.exp(-since_s / time_s) - math.exp(-until_s / time_s)
        return 1.0 + size * time_s * faded / (until_s - since_s)


def _windows(rig: Rig, settings: ChipSettings) -> Iterator[tuple[float, int]]:
    """Yield true centre and opening of every window; the key shows every slit."""
    drawn = {name: shown.at_mm for name, shown in rig.mask.openings.items() if name != openings.NONE}
    places = [*drawn.values(), *([rig.mask.key_mm] if rig.mask.key_mm is not None else [])]
    turned = min(places) + max(places)
    for name, at_mm in drawn.items():
        if name in settings.missing:
            continue
        place = turned - at_mm if settings.mirrored else at_mm
        yield place + settings.offset_mm + settings.off_mm.get(name, 0.0), openings.mask(name)
    if rig.mask.key_mm is not None:
        place = turned - rig.mask.key_mm if settings.mirrored else rig.mask.key_mm
        yield place + settings.offset_mm, max(rig.opening_masks)
