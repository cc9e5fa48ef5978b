"""Moves: how long the gates stay shut between visits on a rig."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq.description import Rig
from daq.itinerary.orders import FloatArray, Order


@dataclass(frozen=True, slots=True)
class Moves:
    """Times between gates [s].

    `mask_s` (K, K) from opening to opening, in the order of the rig's bit masks; a detector move takes
    `detector_s` and its distance over `speed_mm_s`; nothing is shorter than `readout_s`. Moves that take
    up play are as long in the other direction: the rig waits, so that a linear drift cancels.
    """

    mask_s: FloatArray
    detector_s: float
    speed_mm_s: float
    readout_s: float

    def between_s(self, order: Order, places_mm: FloatArray) -> FloatArray:
        """Return the time between the gates of neighbouring visits, shape (visits - 1,)."""
        mask_s = self.mask_s[order.opening[:-1], order.opening[1:]]
        distance_mm = np.abs(np.diff(places_mm[order.position]))
        detector_s = np.where(distance_mm > 0, self.detector_s + distance_mm / self.speed_mm_s, 0.0)
        return np.maximum(np.maximum(mask_s, detector_s), self.readout_s)

    @property
    def within_stand_s(self) -> FloatArray:
        """The time between two gates of one stand by opening, (K, K); none between visits that are one."""
        between = np.maximum(self.mask_s, self.readout_s)
        np.fill_diagonal(between, 0.0)
        return between

    def stand_change_s(self, places_mm: FloatArray) -> float:
        """Return the mean time of a step to the next position while the mask stands still [s]."""
        if places_mm.size < 2:
            return self.readout_s
        distance_mm = float(np.abs(np.diff(places_mm)).mean())
        return max(self.detector_s + distance_mm / self.speed_mm_s, self.readout_s)


def moves_of(rig: Rig) -> Moves:
    """Return the move times of a rig."""
    every, times_s = rig.opening_masks, rig.mask_move_s()
    axis = rig.axes[rig.detector.axis]
    return Moves(
        mask_s=np.array([[times_s[here, there] for there in every] for here in every]),
        detector_s=axis.settle_s + axis.takeup_s,
        speed_mm_s=axis.speed_mm_s,
        readout_s=rig.readout_s,
    )


def start_times_s(dwell_s: FloatArray, between_s: FloatArray) -> FloatArray:
    """Return when each gate opens, the first at 0 [s]."""
    return np.concatenate([[0.0], np.cumsum(dwell_s[:-1] + between_s)])
