"""Stands: every opening at one place, there and back in turn, as tasks ask for them and look at them."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.itinerary import opening_order
from daq.records import Reading
from daq.tasks.contract import Ask, Setting, Taken


def there_and_back(setting: Setting, stands: int, dwell_s: float) -> list[Ask]:
    """Return stands at the brightest place in the order of a run; the role of a visit is its stand."""
    order = [openings.mask(name) for name in opening_order(setting.measurement, setting.rig)]
    place, beam = setting.yardstick.position_mm, setting.open_beam
    return [
        Ask(str(stand), dwell_s, place, opening, beam=beam)
        for stand in range(stands)
        for opening in (order if stand % 2 == 0 else order[::-1])
    ]


def by_stand(setting: Setting, taken: Sequence[Taken], value: Callable[[Reading], float]) -> FloatArray:
    """Return a value of every visit by stand and opening (stands, K), the openings in binary order."""
    masks = list(setting.rig.opening_masks)
    found = np.zeros((max(int(ask.role) for ask, _ in taken) + 1, len(masks)))
    for ask, reading in taken:
        found[int(ask.role), masks.index(ask.opening)] = value(reading)
    return found
