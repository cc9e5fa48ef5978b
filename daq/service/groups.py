"""Which visits belong together: what is repeated whole when it was interrupted."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass

import numpy as np
import xarray as xr

from daq.itinerary import Itinerary
from daq.itinerary.orders import IntArray
from daq.records import Visit

PLANNED, AFTER_BREAK, AFTER_FAULT, BY_RULE = 0, 1, 2, 3  # ids of daq.records.REASONS


@dataclass(frozen=True, slots=True)
class Place:
    """Where a run goes on: the first visit of a stand, its attempt and the reason for it."""

    number: int
    attempt: int = 1
    reason: int = PLANNED


def stand_starts(itinerary: Itinerary) -> IntArray:
    """Return the numbers of the visits with which a stand begins (in blocked order: every visit)."""
    return np.flatnonzero(np.diff(itinerary.stand, prepend=-1))


def repeat_from(itinerary: Itinerary, number: int, attempt: int, reason: int) -> Place:
    """Return the place from which the stand of a visit is repeated whole."""
    starts = stand_starts(itinerary)
    return Place(int(starts[np.searchsorted(starts, number, side="right") - 1]), attempt + 1, reason)


def place_after(itinerary: Itinerary, visits: xr.Dataset) -> Place:
    """Return where a run goes on after a break: the interrupted stand again, whole, else the next one."""
    planned = np.flatnonzero(visits["visit"].values >= 0)
    if planned.size == 0:
        return Place(0)
    last = int(planned[-1])
    number, attempt = int(visits["visit"].values[last]), int(visits["attempt"].values[last])
    if number + 1 == len(itinerary) or number + 1 in stand_starts(itinerary):
        return Place(number + 1)
    return repeat_from(itinerary, number, attempt, AFTER_BREAK)


def supply(
    itinerary: Itinerary, place: Place, may_go_on: Callable[[int], bool]
) -> Iterator[tuple[Visit, int, int]]:
    """Yield (visit, attempt, reason) from a place on; each stand asks, by its first visit, whether it may."""
    starts = set(stand_starts(itinerary).tolist())
    attempt, reason = place.attempt, place.reason
    for number in range(place.number, len(itinerary)):
        if number in starts:
            if not may_go_on(number):
                return
            if number != place.number:
                attempt, reason = 1, PLANNED
        yield itinerary.visit(number), attempt, reason
