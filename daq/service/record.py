"""The record: what the archive of a run says of it besides the counts."""

from __future__ import annotations

import uuid
from dataclasses import asdict
from typing import Any

import numpy as np
from tzlocal import get_localzone_name

from daq import openings
from daq.description import Measurement, Rig
from daq.estimate import kappa
from daq.estimate.blinding import OPEN
from daq.itinerary import Itinerary, forecast
from daq.ports import Bench, Clock, Devices
from daq.service.live import stamp
from daq.service.load import Loaded
from daq.service.metrology import described
from daq.service.software import software


def record_of(
    loaded: Loaded, itinerary: Itinerary, clock: Clock, devices: Devices, bench: Bench | None
) -> dict[str, Any]:
    """Return the attributes of a new run: set-up, settings, devices, seeds, software; JSON only."""
    rig, normalisation = loaded.rig, loaded.measurement.estimate.normalisation
    return {
        **plan_record(loaded, itinerary),
        "kind": "rehearsal" if bench else "run",
        "clock": clock.kind,
        "devices": _devices(rig, devices),
        "axes": [rig.mask.axis, rig.detector.axis],
        "sensors": _sensors(devices),
        "channels": max(entry.channels for entry in rig.devices.values()),
        "slices": rig.slices,
        **({"list_mode": dict(rig.list_mode)} if rig.list_mode else {}),
        **_judged_by(itinerary, devices),
        "planned_se": forecast(itinerary, loaded.measurement).kappa_se,
        "started_utc": stamp(clock.utc_ns()),
        "bench_seed": None if bench is None else _bench_seed(loaded),
        "truth_kappa": None if bench is None else _truth(bench, itinerary, normalisation),
    }


def plan_record(loaded: Loaded, itinerary: Itinerary) -> dict[str, Any]:
    """Return what is known of a run before any device is asked."""
    return {
        **_identity(loaded),
        "set_up": _set_up(loaded.rig),
        "software": software(),
        "slits": itinerary.slits,
        "openings": itinerary.openings.tolist(),
        "positions_mm": itinerary.positions_mm.tolist(),
        "weights": itinerary.weights.tolist(),
        "signs": {name: signs.tolist() for name, signs in itinerary.signs.items()},
        "expected_hz": itinerary.rates_hz.tolist(),
        **settings_of(loaded.measurement),
        **described(loaded, itinerary),
        "planned_pairs": itinerary.planned_pairs,
        "visits_planned": len(itinerary),
        "visits_per_stand": itinerary.visits_per_stand,
        "plan_notes": list(itinerary.notes),
        "order": itinerary.order,
        "seed": itinerary.seed,
        "blinding": OPEN,
        "hard_end": loaded.measurement.stop.hard_end,
        "zone": str(get_localzone_name() or "UTC"),
        "wishes": asdict(loaded.wishes),
    }


def settings_of(measurement: Measurement) -> dict[str, Any]:
    """Return how readings become a residual, and the description whole, its defaults filled in."""
    settings = measurement.estimate
    return {
        "counting": settings.counting,
        "fano": settings.fano,
        "monitor_channel": settings.monitor_channel,
        "heralded": settings.heralded and settings.heralded.model_dump(),
        "quality": measurement.quality.model_dump(),
        "warn": measurement.warn.model_dump(),
        "normalisation": settings.normalisation,
        "dead_time_s": settings.dead_time_s,
        "dead_time_kind": settings.dead_time_kind,
        "dead_time_u_s": settings.dead_time_u_s,
        "goal_se": settings.goal_se,
        "description": measurement.model_dump(mode="json", by_alias=True),
    }


def _judged_by(itinerary: Itinerary, devices: Devices) -> dict[str, Any]:
    """Return what the quality rules compare encoders with: targets and tolerances of the axes."""
    masks = itinerary.openings.tolist()
    return {
        "tolerance_mm": dict(devices.tolerance_mm),
        "targets_mm": {openings.name(mask): dict(devices.mask.target_mm(mask)) for mask in masks},
    }


def _identity(loaded: Loaded) -> dict[str, Any]:
    measurement = loaded.measurement
    return {
        "id": str(uuid.uuid4()),
        "name": measurement.name,
        "title": measurement.title,
        "purpose": measurement.purpose,
        "notes": dict(measurement.notes),
    }


def _set_up(rig: Rig) -> dict[str, Any]:
    """Return geometry, slits and openings as they were described, lengths in the units of their names."""
    return {
        "rig": rig.name,
        "simulated": rig.simulated,
        "chip": rig.mask.chip,
        **rig.geometry.model_dump(),
        "slits": {letter: slit.model_dump() for letter, slit in rig.slits.items()},
        "openings": {name: shown.model_dump() for name, shown in rig.mask.openings.items()},
        "axes": {name: axis.model_dump() for name, axis in rig.axes.items()},
    }


def _devices(rig: Rig, devices: Devices) -> dict[str, Any]:
    """Return what each device entry is, with the identity replies verbatim."""
    replies = {device.name: device.identity() for device in devices.all}
    return {
        name: entry.model_dump()
        | {
            "role": _role(rig, devices, name),
            "identity": replies.get(name)
            or {axis: replies[axis] for axis, one in rig.axes.items() if one.device == name},
        }
        for name, entry in rig.devices.items()
    }


def _role(rig: Rig, devices: Devices, name: str) -> str:
    """Return what a device is there for: to count, to sense, to block the beam, or to move axes."""
    if name == devices.counter.name:
        return "counter"
    if name in {sensor.name for sensor in devices.sensors}:
        return "sensor"
    axes = [axis for axis, one in rig.axes.items() if one.device == name]
    return f"moves {', '.join(axes)}" if axes else "shutter"


def _bench_seed(loaded: Loaded) -> int | None:
    """Return the seed of the simulated truth: the command line's, else that of the rig's table [bench]."""
    seed: int | None = (loaded.rig.bench or {}).get("seed")
    return seed if loaded.bench_seed is None else loaded.bench_seed


def _sensors(devices: Devices) -> dict[str, str]:
    return {
        f"{sensor.name}_{key}": unit for sensor in devices.sensors for key, (_, unit) in sensor.read().items()
    }


def _truth(bench: Bench, itinerary: Itinerary, normalisation: str) -> float | None:
    """Return kappa of the noise-free rates under the run's own weights; None where nothing interferes."""
    masks = itinerary.openings.tolist()
    rates = np.asarray(bench.true_rates_hz(masks, itinerary.positions_mm.tolist()))
    named = {openings.name(mask): rates[:, column] for column, mask in enumerate(masks)}
    try:
        value, _ = kappa(named, named, itinerary.weights, signs=itinerary.signs, normalisation=normalisation)
    except ValueError:
        return None
    return float(value)
