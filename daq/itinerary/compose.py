"""Compose: from a measurement and a rig to the ordered visits of a run, with their true start times."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from daq import openings
from daq.description import Measurement, Rig
from daq.estimate.linearity import marginal_weights
from daq.estimate.plan import Heralded, Plan
from daq.estimate.slits import expected_rates_hz, planned_weights
from daq.itinerary.orders import FloatArray, IntArray, Order, blocked, zigzag
from daq.records import Visit


@dataclass(frozen=True, slots=True, eq=False)
class Itinerary:
    """The ordered visits of a run.

    Arrays of shape (visits,): `opening` (bit masks), `position_mm`, `start_s`, `dwell_s`, `stand`, `lap`,
    `pair`, `forward`. For the estimate: `openings` (K,) bit masks, `positions_mm` (J,), `weights` (J,),
    `signs` "AB" -> (J,), `rates_hz` (J, K) as expected.
    """

    opening: IntArray
    position_mm: FloatArray
    start_s: FloatArray
    dwell_s: FloatArray
    stand: IntArray
    lap: IntArray
    pair: IntArray
    forward: NDArray[np.bool_]
    openings: IntArray
    positions_mm: FloatArray
    slits: int
    weights: FloatArray
    signs: dict[str, FloatArray]
    rates_hz: FloatArray
    order: str
    seed: int
    total_s: float

    def __len__(self) -> int:
        return int(self.opening.size)

    @property
    def planned_pairs(self) -> int:
        """The number of complete pairs."""
        return (int(self.lap.max()) + 1) // 2

    @property
    def position_index(self) -> IntArray:
        """Where each visit's position stands in `positions_mm`, shape (visits,)."""
        by_value = np.argsort(self.positions_mm)
        return by_value[np.searchsorted(self.positions_mm, self.position_mm, sorter=by_value)]

    @property
    def opening_index(self) -> IntArray:
        """Where each visit's opening stands in `openings`, shape (visits,)."""
        return np.searchsorted(self.openings, self.opening)

    def visit(self, number: int) -> Visit:
        """Return one planned visit."""
        return Visit(
            number=number,
            opening=int(self.opening[number]),
            position_mm=float(self.position_mm[number]),
            dwell_s=float(self.dwell_s[number]),
            start_s=float(self.start_s[number]),
            stand=int(self.stand[number]),
            lap=int(self.lap[number]),
            pair=int(self.pair[number]),
            forward=bool(self.forward[number]),
        )


def compose(measurement: Measurement, rig: Rig, seed: int | None = None) -> Itinerary:
    """Return the itinerary of a measurement on a rig.

    Parameters
    ----------
    seed
        Draws the coin of each pair; `itinerary.seed` of the measurement when None.
    """
    plan = measurement.itinerary
    seed = plan.seed if seed is None else seed
    places = np.array(measurement.positions.places_mm)
    masks = np.array(rig.opening_masks, dtype=np.int64)
    coins = np.random.Generator(np.random.Philox(seed)).random((plan.laps + 1) // 2) < 0.5
    sequence = [
        int(np.flatnonzero(masks == openings.mask(name))[0]) for name in opening_order(measurement, rig)
    ]
    if plan.order == "zigzag":
        order = zigzag(sequence, places.size, plan.laps, coins)
    else:
        order = blocked(sequence, places.size, plan.laps)
        coins[:] = True
    dwell_s = np.full(order.opening.size, plan.dwell_s)
    start_s = _start_times_s(order, masks, places, dwell_s, rig)
    rates_hz = expected_rates(measurement, rig)
    weights, signs = planned_weights(rates_hz, masks, len(rig.slits))
    if measurement.estimate.counting == "counts":
        weights = marginal_weights(weights, rates_hz, masks, len(rig.slits))
    return Itinerary(
        opening=masks[order.opening],
        position_mm=places[order.position],
        start_s=start_s,
        dwell_s=dwell_s,
        stand=order.stand,
        lap=order.lap,
        pair=order.lap // 2,
        forward=coins[order.lap // 2],
        openings=masks,
        positions_mm=places,
        slits=len(rig.slits),
        weights=weights,
        signs=signs,
        rates_hz=rates_hz,
        order=plan.order,
        seed=seed,
        total_s=float(start_s[-1] + dwell_s[-1]),
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


def plan_of(itinerary: Itinerary, measurement: Measurement) -> Plan:
    """Return what the estimator has to know of an itinerary."""
    settings = measurement.estimate
    complete = itinerary.pair < itinerary.planned_pairs
    return Plan(
        slits=itinerary.slits,
        openings=itinerary.openings,
        positions_mm=itinerary.positions_mm,
        weights=itinerary.weights,
        signs=itinerary.signs,
        normalisation=settings.normalisation,
        dead_time_s=settings.dead_time_s,
        dead_time_kind=settings.dead_time_kind,
        planned_pairs=itinerary.planned_pairs,
        stand=itinerary.stand,
        pair=np.where(complete, itinerary.pair, -1),
        position=itinerary.position_index,
        opening=itinerary.opening_index,
        goal_se=settings.goal_se,
        counting=settings.counting,
        fano=settings.fano,
        monitor=settings.monitor_channel,
        heralded=None if settings.heralded is None else Heralded(**settings.heralded.model_dump()),
    )


def _start_times_s(
    order: Order, masks: IntArray, places: FloatArray, dwell_s: FloatArray, rig: Rig
) -> FloatArray:
    """Return when each gate opens: the longest of mask move, detector move and readout lies between."""
    moves = rig.mask_move_s()
    matrix = np.array([[moves[int(here), int(there)] for there in masks] for here in masks])
    mask_s = matrix[order.opening[:-1], order.opening[1:]]
    axis = rig.axes[rig.detector.axis]
    distance = np.abs(np.diff(places[order.position]))
    detector_s = np.where(distance > 0, axis.settle_s + distance / axis.speed_mm_s, 0.0)
    gap_s = np.maximum(np.maximum(mask_s, detector_s), rig.readout_s)
    return np.concatenate([[0.0], np.cumsum(dwell_s[:-1] + gap_s)])
