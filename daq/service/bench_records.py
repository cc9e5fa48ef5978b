"""Bench records in use: the newest one of each task that is valid for a rig, and why an older one is not."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from daq.description import Rig
from daq.records import TASKS
from daq.service.load import Loaded
from daq.storage.bench import outcomes


def set_up_of(rig: Rig) -> dict[str, str]:
    """Return what a record may hold for: chip, geometry, axes and devices, most of them as digests."""
    described = rig.model_dump(mode="json", by_alias=True)
    dial = described["by_hand"]["detector"]
    parts = {
        "geometry": [described["geometry"], described["slits"]],
        "axes": described["axes"],
        "devices": [described["devices"], dial["now"]] if dial else described["devices"],
    }
    digests = {
        name: hashlib.sha256(json.dumps(part, sort_keys=True).encode()).hexdigest()[:16]
        for name, part in parts.items()
    }
    return {"rig": rig.name, "chip": rig.mask.chip, **digests}


def why_not(record: Mapping[str, Any], rig: Rig, now: datetime) -> str:
    """Return why a record may not be taken for a rig now, in words; "" when it may.

    What a simulated bench gave was dated by its own clock: it does not grow old.
    """
    other = _other_set_up(record, rig)
    if other:
        return other
    if _failed(record):
        return f"it failed: {record.get('sentence', '')}"
    until = record.get("valid_until")
    if not rig.simulated and (not until or datetime.fromisoformat(until) < now):
        return f"it held until {until}"
    return ""


def _other_set_up(record: Mapping[str, Any], rig: Rig) -> str:
    then, here = record.get("set_up", {}), set_up_of(rig)
    for part in ("rig", *record.get("holds_for", ())):
        if then.get(part) != here.get(part):
            was = f" ({then.get(part)}, now {here.get(part)})" if part in ("rig", "chip") else ""
            return f"it was taken with another {part}{was}"
    return ""


def _failed(record: Mapping[str, Any]) -> bool:
    return record.get("verdict") not in ("pass", "doubtful")


def newest(lab: Path, task: str, rig: Rig, now: datetime | None = None) -> tuple[dict[str, Any] | None, str]:
    """Return the newest valid record of a task, or None and why the newest one may not be taken.

    What failed on the bench as it stands is not passed over for what was good before; what a broken link
    ended says nothing of the bench.
    """
    now = now or datetime.now(UTC)
    first = ""
    for found in outcomes(lab, task):
        why = why_not(found, rig, now)
        if not why:
            return found, ""
        first = first or f"{found['record']}: {why}"
        if _failed(found) and not found.get("broken_off") and not _other_set_up(found, rig):
            break
    return None, first or "never done in this lab"


def known(loaded: Loaded, lab: Path) -> tuple[dict[str, Any], dict[str, str]]:
    """Return the values of every task that has a valid record, and why each other one has none."""
    found = {name: newest(lab, name, loaded.rig) for name in TASKS}
    values = {name: record["values"] for name, (record, _) in found.items() if record is not None}
    return values, {name: why for name, (record, why) in found.items() if record is None}


def earlier(loaded: Loaded, lab: Path, now: datetime | None = None) -> dict[str, dict[str, Any]]:
    """Return the newest valid record of every task, by task, without the list of its visits."""
    found = {name: newest(lab, name, loaded.rig, now)[0] for name in TASKS}
    return {name: _without_visits(record) for name, record in found.items() if record is not None}


def _without_visits(record: Mapping[str, Any]) -> dict[str, Any]:
    return {name: value for name, value in record.items() if name != "asked"}


def due_at(record: Mapping[str, Any], ended_utc: str, within_days: float = 0.75) -> bool:
    """Return whether a record will have run out by the evening after a run."""
    until = record.get("valid_until")
    if not until or not ended_utc:
        return False
    return datetime.fromisoformat(until) < datetime.fromisoformat(ended_utc) + timedelta(days=within_days)
