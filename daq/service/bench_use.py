"""Bench records laid into a description: what a plan takes from the newest valid ones, and which."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

from daq.description.measurement import Measurement
from daq.records import TASKS
from daq.service.bench_records import newest
from daq.service.load import Loaded
from daq.tasks.pilot import with_pilot

PLACES = 4  # decimals of a place of the mask [mm]


@dataclass(frozen=True, slots=True)
class Used:
    """A description with bench records laid in, where the mask's openings stand by them, and what is said."""

    loaded: Loaded
    at_mm: Mapping[str, float]
    said: tuple[str, ...]


def laid_in(loaded: Loaded, lab: Path) -> Used:
    """Return a description that takes the newest valid records of a lab.

    The pilot takes the place of the expected drift, register that of the drawn places, deadtime
    that of the described dead time where it knows it better.
    """
    found = {task: newest(lab, task, loaded.rig) for task in TASKS}
    records = {task: record for task, (record, _) in found.items() if record is not None}
    at_mm = _places_mm(loaded, records.get("register"))
    measurement, said = loaded.measurement, []
    if "pilot" in records:
        values = records["pilot"]["values"]
        measurement = with_pilot(measurement, values["counts"], values["sample_s"])
        said.append(f"The drift is that of {records['pilot']['record']}.")
    if at_mm:
        said.append(f"The openings stand where {records['register']['record']} found them.")
    if _better(records.get("deadtime"), measurement):
        measurement = _with_dead_time(measurement, records["deadtime"])
        said.append(f"The dead time is that of {records['deadtime']['record']}.")
    said += [f"Not used, {why}." for task, (_, why) in found.items() if why and not why.startswith("never")]
    return Used(replace(loaded, measurement=measurement, rig=_moved(loaded, at_mm)), at_mm, tuple(said))


def _places_mm(loaded: Loaded, record: Mapping[str, Any] | None) -> dict[str, float]:
    centres = {} if record is None else record["values"]["centre_mm"]
    return {name: round(at, PLACES) for name, at in centres.items() if name in loaded.rig.mask.openings}


def _moved(loaded: Loaded, at_mm: Mapping[str, float]) -> Any:
    mask = loaded.rig.mask
    shown = {
        name: one.model_copy(update={"at_mm": at_mm.get(name, one.at_mm)})
        for name, one in mask.openings.items()
    }
    return loaded.rig.model_copy(update={"mask": mask.model_copy(update={"openings": shown})})


def _better(record: Mapping[str, Any] | None, measurement: Measurement) -> bool:
    told = measurement.estimate.dead_time_u_s
    return record is not None and (not told or record["se"]["dead_time_s"] < told)


def _with_dead_time(measurement: Measurement, record: Mapping[str, Any]) -> Measurement:
    known = {
        "dead_time_s": max(record["values"]["dead_time_s"], 0.0),
        "dead_time_u_s": record["se"]["dead_time_s"],
    }
    return measurement.model_copy(update={"estimate": measurement.estimate.model_copy(update=known)})


def changes(used: Used, table: Mapping[str, Any]) -> Iterator[tuple[str, Any]]:
    """Yield what the records change in the table of a measurement, for a plan that pins it."""
    measurement = used.loaded.measurement
    if measurement.pilot is not None:
        yield "pilot", measurement.pilot.model_dump(exclude_none=True)
    known = ("dead_time_s", "dead_time_u_s")
    yield (
        "estimate",
        {**table.get("estimate", {}), **{name: getattr(measurement.estimate, name) for name in known}},
    )
