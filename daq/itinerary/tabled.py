"""Tabled: the itinerary behind visits that were made elsewhere, worked out from the visits alone."""

from __future__ import annotations

import numpy as np

from daq.itinerary.compose import Itinerary
from daq.itinerary.cost import pattern_of
from daq.itinerary.known import Known
from daq.itinerary.orders import FloatArray, IntArray


def laps_of(opening: IntArray, position_mm: FloatArray, attempt: IntArray) -> IntArray:
    """Return the lap of each visit: how often its opening was shown at its position before.

    A further attempt belongs to the lap of the one before it.
    """
    seen: dict[tuple[int, float], int] = {}
    laps = []
    for cell_opening, place, number in zip(
        opening.tolist(), position_mm.tolist(), attempt.tolist(), strict=True
    ):
        cell = (cell_opening, place)
        seen[cell] = seen.get(cell, -1) + (number == 1 or cell not in seen)
        laps.append(seen[cell])
    return np.array(laps, np.int64)


def tabled(
    known: Known,
    opening: IntArray,
    position_mm: FloatArray,
    lap: IntArray,
    start_s: FloatArray,
    dwell_s: FloatArray,
) -> tuple[Itinerary, IntArray]:
    """Return the itinerary of visits in their order, and the planned number of each.

    A stand is all openings at one position in one lap. An opening that a stand lacks stands at the end of the
    plan, as a visit that was never made.
    """
    place = np.searchsorted(known.places_mm, position_mm)
    slot = np.searchsorted(known.openings, opening)
    cells = (lap * len(known.places_mm) + place) * len(known.openings) + slot
    first = np.sort(np.unique(cells, return_index=True)[1])
    stands = np.unique(cells // len(known.openings))
    wanted = (stands[:, None] * len(known.openings) + np.arange(len(known.openings))).ravel()
    missing = wanted[~np.isin(wanted, cells)]
    planned = np.concatenate([cells[first], missing])
    number = {cell: index for index, cell in enumerate(planned.tolist())}
    end_s = float(start_s[-1] + dwell_s[-1])
    plan = _itinerary(
        known,
        planned,
        np.concatenate([start_s[first], np.full(len(missing), end_s)]),
        np.concatenate([dwell_s[first], np.full(len(missing), float(dwell_s[first].mean()))]),
    )
    return plan, np.array([number[cell] for cell in cells.tolist()], np.int64)


def _itinerary(known: Known, cells: IntArray, start_s: FloatArray, dwell_s: FloatArray) -> Itinerary:
    stand, slot = np.divmod(cells, len(known.openings))
    lap, place = np.divmod(stand, len(known.places_mm))
    _, first, same = np.unique(stand, return_index=True, return_inverse=True)
    by_appearance = np.argsort(np.argsort(first))
    pattern = pattern_of(known.rates_hz, known.openings, known.slits, known.normalisation, known.counts)
    return Itinerary(
        opening=known.openings[slot],
        position_mm=known.places_mm[place],
        start_s=start_s,
        dwell_s=dwell_s,
        stand=by_appearance[same],
        lap=lap,
        pair=lap // 2,
        forward=np.ones(len(cells), bool),
        openings=known.openings,
        positions_mm=known.places_mm,
        slits=known.slits,
        weights=pattern.weights,
        signs=dict(pattern.signs),
        rates_hz=known.rates_hz,
        order="as it was made",
        seed=0,
        total_s=float(start_s.max() + dwell_s[-1]),
    )
