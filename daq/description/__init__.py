"""Descriptions: a table read from TOML becomes a frozen model, or a list of everything wrong with it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal, overload

from pydantic import ValidationError

from daq import openings
from daq.description.dialect import Dialect
from daq.description.foreign import ForeignTable
from daq.description.measurement import Measurement
from daq.description.problems import every_problem
from daq.description.rig import Rig
from daq.errors import DescriptionError

__all__ = ["Dialect", "ForeignTable", "Measurement", "Rig", "joint_problems", "parse"]

_MODELS: Mapping[str, type[Measurement] | type[Rig] | type[Dialect] | type[ForeignTable]] = {
    "measurement": Measurement,
    "rig": Rig,
    "dialect": Dialect,
    "foreign table": ForeignTable,
}


@overload
def parse(table: Mapping[str, Any], source: str, kind: Literal["measurement"]) -> Measurement: ...
@overload
def parse(table: Mapping[str, Any], source: str, kind: Literal["rig"]) -> Rig: ...
@overload
def parse(table: Mapping[str, Any], source: str, kind: Literal["dialect"]) -> Dialect: ...
@overload
def parse(table: Mapping[str, Any], source: str, kind: Literal["foreign table"]) -> ForeignTable: ...
def parse(table: Mapping[str, Any], source: str, kind: str) -> Measurement | Rig | Dialect | ForeignTable:
    """Return the description that a table holds.

    Raises
    ------
    DescriptionError
        With every problem at once, each with file (`source`), key and remedy.
    """
    model = _MODELS[kind]
    try:
        return model.model_validate(table)
    except ValidationError as error:
        raise DescriptionError(every_problem(error, model, table, source)) from error


def joint_problems(measurement: Measurement, rig: Rig, source: str) -> tuple[str, ...]:
    """Return what is wrong between a measurement and its rig, as sentences."""
    axis = rig.axes[rig.detector.axis]
    low, high = axis.limits_mm
    outside = [place for place in measurement.positions.places_mm if not low <= place <= high]
    problems = []
    if outside:
        problems.append(
            f"{source}, positions: {outside[0]:g} mm lies outside the limits {low:g} .. {high:g} mm of axis "
            f"{rig.detector.axis!r}. Move the positions inside, or mend the limits in the rig file."
        )
    given = measurement.itinerary.opening_order
    have = {openings.name(mask) for mask in rig.opening_masks}
    if given is not None and set(given) != have:
        problems.append(
            f"{source}, itinerary.opening_order: name every opening of the mask, and no other: "
            f"{', '.join(sorted(have))}."
        )
    dwell_s, gate_s = measurement.itinerary.dwell_s, rig.shortest_gate_s
    if dwell_s is not None and dwell_s < gate_s:
        problems.append(
            f"{source}, itinerary.dwell_s: the counter of the rig opens its gate for {gate_s:g} s at least, "
            f"not {dwell_s:g} s. Give a longer dwell."
        )
    if measurement.blinding is not None and len(rig.slits) < 3:
        problems.append(
            f"{source}, blinding: a mask of {len(rig.slits)} slits has no third-order residual to hide. "
            "Take the table out."
        )
    channels = max(entry.channels for entry in rig.devices.values())
    problems += [
        f"{source}, estimate.{key}: there is no channel {channel}; the counter of the rig has channels 0 to "
        f"{channels - 1}. Name one of them, or mend `channels` in the rig file."
        for key, channel in measurement.estimate.channels_needed.items()
        if channel >= channels
    ]
    return tuple(problems)
