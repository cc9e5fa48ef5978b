"""Rigs with two to five slits, and measurements whose dwell is left to the planner."""

from __future__ import annotations

from typing import Any

from daq import openings
from daq.description import Measurement, Rig, parse
from tests.examples import changed, measurement_table, rig_table

PITCH_M = 120e-6


def rig_of(slits: int, **changes: Any) -> Rig:
    """Return a rig with so many slits, its openings 2 mm apart in binary order."""
    table = changed(rig_table(), **changes)
    letters = openings.LETTERS[:slits]
    table["slits"] = {
        letter: {"centre_m": PITCH_M * (at - (slits - 1) / 2), "width_m": 40e-6}
        for at, letter in enumerate(letters)
    }
    names = openings.names(slits)
    table["mask"]["openings"] = {name: {"at_mm": 2.0 * at} for at, name in enumerate(names)}
    table["axes"]["mask"]["limits_mm"] = [0.0, 2.0 * len(names)]
    return parse(table, "rig.toml", "rig")


def without_dwell(**changes: Any) -> Measurement:
    """Return the Lantern measurement with changes, its dwell left to the planner."""
    return without("itinerary", "dwell_s", **changes)


def without(table: str, key: str, **changes: Any) -> Measurement:
    """Return the Lantern measurement with changes and without one key."""
    changed_table = changed(measurement_table(), **changes)
    del changed_table[table][key]
    return parse(changed_table, "lantern.toml", "measurement")
