"""Metrology: what the stated uncertainties of a rig's slits do to the residual."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from typing import Any

import numpy as np

from daq import openings
from daq.description import Rig
from daq.description.rig import Slit
from daq.estimate.arrays import FloatArray
from daq.estimate.loads import Instance, slit_loads
from daq.estimate.slits import Slits, expected_rates_hz
from daq.itinerary import Itinerary, plan_of
from daq.service.load import Loaded

STEP_MM = 1e-3  # far below any fringe
TINY_HZ = 1e-30  # an opening that shows nothing has no slope


def described(loaded: Loaded, itinerary: Itinerary) -> dict[str, Any]:
    """Return what the description says of systematic errors.

    `slit_loads`: change of kappa for the uncertainty of each slit; `slope_per_mm` of the log of the expected
    rates by detector position; `cuts`: every slit as it was measured, where openings have slits of their own.
    """
    rig, places_mm = loaded.rig, itinerary.positions_mm
    shown = {
        mask: {letter: (slit.centre_m, slit.width_m) for letter, slit in rig.slits_of(mask).items()}
        for mask in rig.opening_masks
    }
    above, below = (_rates_hz(loaded, places_mm + step, shown) for step in (STEP_MM, -STEP_MM))
    plan = plan_of(itinerary, loaded.measurement)
    loads = slit_loads(_instances(rig), plan, lambda changed: _rates_hz(loaded, places_mm, changed))
    slope = np.log(np.maximum(above, TINY_HZ) / np.maximum(below, TINY_HZ)) / (2 * STEP_MM)
    return {"slit_loads": loads, "slope_per_mm": slope.tolist(), "cuts": _cuts(rig)}


def _cuts(rig: Rig) -> dict[str, Any] | None:
    """Return the metrology of a mask with slits cut apart; None where all openings share them."""
    if not any(shown.cuts for shown in rig.mask.openings.values()):
        return None
    return {**rig.geometry.model_dump(), "slits": [asdict(one) for one in _instances(rig)]}


def _rates_hz(loaded: Loaded, places_mm: FloatArray, shown: Mapping[int, Slits]) -> FloatArray:
    geometry, expect = loaded.rig.geometry, loaded.measurement.expect
    return expected_rates_hz(
        shown,
        places_mm,
        geometry.wavelength_m,
        geometry.distance_m,
        expect.single_slit_rate_hz,
        expect.background_rate_hz,
    )


def _instances(rig: Rig) -> list[Instance]:
    """Return every slit that was cut: those of [slits], and those that an opening has of its own."""
    cut: dict[str, Slit] = {}
    users: dict[str, list[int]] = {}
    for mask in rig.opening_masks:
        name = openings.name(mask)
        for letter, slit in rig.slits_of(mask).items():
            label = f"{letter} of {name}" if letter in rig.mask.openings[name].cuts else letter
            cut[label] = slit
            users.setdefault(label, []).append(mask)
    return [
        Instance(
            label,
            label[0],
            tuple(users[label]),
            slit.centre_m,
            slit.width_m,
            slit.centre_u_m,
            slit.width_u_m,
        )
        for label, slit in cut.items()
    ]
