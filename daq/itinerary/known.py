"""Known: what a plan can count on before it decides anything."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from daq import openings
from daq.description import Measurement, Rig
from daq.description.measurement import Order as Settings
from daq.estimate.slits import expected_rates_hz
from daq.itinerary.moves import Moves, moves_of
from daq.itinerary.orders import FloatArray, IntArray
from daq.itinerary.pilot import Ripple, wander_of
from daq.itinerary.wander import Wander


@dataclass(frozen=True, slots=True)
class Known:
    """Settings, expected rates (positions, openings), places, move times and the wander of the source."""

    settings: Settings
    openings: IntArray
    slits: int
    places_mm: FloatArray
    rates_hz: FloatArray
    moves: Moves
    wander: Wander
    time: str
    normalisation: str
    counts: bool
    dead_time_s: float
    shortest_gate_s: float
    ripples: tuple[Ripple, ...]


def known_of(measurement: Measurement, rig: Rig) -> Known:
    """Return what a measurement and a rig say."""
    wander, ripples = wander_of(measurement)
    return Known(
        settings=measurement.itinerary,
        openings=np.array(rig.opening_masks, dtype=np.int64),
        slits=len(rig.slits),
        places_mm=np.array(measurement.positions.places_mm),
        rates_hz=expected_rates(measurement, rig),
        moves=moves_of(rig),
        wander=wander,
        time=measurement.positions.time,
        normalisation=measurement.estimate.normalisation,
        counts=measurement.estimate.counting == "counts",
        dead_time_s=measurement.estimate.dead_time_s,
        shortest_gate_s=rig.shortest_gate_s,
        ripples=ripples,
    )


def expected_rates(measurement: Measurement, rig: Rig) -> FloatArray:
    """Return the rates that the description expects, shape (positions, openings) [1/s]."""
    cuts = {
        mask: {letter: (slit.centre_m, slit.width_m) for letter, slit in rig.slits_of(mask).items()}
        for mask in rig.opening_masks
    }
    return expected_rates_hz(
        cuts,
        np.array(measurement.positions.places_mm),
        rig.geometry.wavelength_m,
        rig.geometry.distance_m,
        measurement.expect.single_slit_rate_hz,
        measurement.expect.background_rate_hz,
    )


def opening_order(measurement: Measurement, rig: Rig) -> tuple[str, ...]:
    """Return the order of the openings: the one given, else along the mask (least travel).

    In blocked order, where one move an opening is all the travel there is, it is what is done by hand: from
    no slit to all of them.
    """
    if measurement.itinerary.opening_order:
        return measurement.itinerary.opening_order
    if measurement.itinerary.order == "blocked":
        return tuple(sorted(rig.mask.openings, key=lambda name: (openings.mask(name).bit_count(), name)))
    return tuple(sorted(rig.mask.openings, key=lambda name: rig.mask.openings[name].at_mm))
