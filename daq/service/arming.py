"""Arming: checks, cautions and a typed confirmation before a run may start with nobody present."""

from __future__ import annotations

import json
import secrets
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from hashlib import sha256
from pathlib import Path
from typing import Any

from daq.description import Measurement
from daq.devices.clock import RealClock
from daq.devices.registry import open_devices
from daq.errors import DaqError
from daq.ports import Devices
from daq.service.bench_records import newest
from daq.service.load import NO_WISHES, Loaded, load_run
from daq.service.messages import TEST, Send, by_apprise, post, send_urgent
from daq.service.requests import utc_now
from daq.service.room import events_due, wanted_bytes
from daq.service.settings import Messages
from daq.storage.lab import runs
from daq.storage.lab_book import insert, select, update
from daq.storage.reader import read_meta
from daq.storage.space import free_bytes

VALID_H = 24
EARLIEST = datetime(2026, 1, 1, tzinfo=UTC)  # a clock before this was never set

CAUTIONS = (
    "Emergency stop and interlocks are tested as local rules demand, and work without this computer.",
    "Nobody will be near the moving parts; warning signs and lamps are on.",
    "You have seen limits, parking positions and the mask finding its reference with your own eyes.",
    "Detector bias, source and vacuum are left in a state that your rules allow unattended.",
    "The on-call person knows, has read the test message, and may enter.",
    "Local permission for unattended running exists.",
)


@dataclass(frozen=True, slots=True)
class Check:
    """What was checked, whether it is in order, and what was seen."""

    what: str
    ok: bool
    seen: str


def checks(
    loaded: Loaded, lab: Path, messages: Messages | None, without: Mapping[str, str] | None = None
) -> list[Check]:
    """Return the checks that need no person, all of them, also when one fails.

    Parameters
    ----------
    without
        Bench task -> why somebody wants to do without a valid record of it.
    """
    return [
        *_device_checks(loaded),
        _disk(lab, loaded),
        _clock(datetime.now(UTC)),
        _rehearsed(loaded, lab),
        *_bench_checks(loaded, lab, without or {}),
        _messages(messages),
    ]


def confirm(
    loaded: Loaded,
    lab: Path,
    messages: Messages,
    who: str,
    answer: Callable[[str], str],
    send: Send = by_apprise,
    without: Mapping[str, str] | None = None,
) -> str | None:
    """Ask the cautions one by one, the code of a test message and the run's name; arm when all are given.

    Returns why it did not arm, or None when it did.
    """
    for number, caution in enumerate(CAUTIONS, 1):
        if answer(f"{number}. {caution} Type yes: ").strip().lower() != "yes":
            return f"caution {number} was not confirmed"
    code = secrets.token_hex(3)
    post(lab, TEST, "tercet test message", f"The code is {code}. Type it at the bench.")
    send_urgent(lab, messages, datetime.now(UTC), send)
    if answer("Code of the test message: ").strip() != code:
        return "the code is not the one that was sent"
    if (
        answer(f"Type the name of the measurement ({loaded.measurement.name}) to arm: ")
        != loaded.measurement.name
    ):
        return "the name is not that of the measurement"
    expires = datetime.now(UTC) + timedelta(hours=VALID_H)
    row = {"sha256": digest_of(loaded), "who": who, "utc": utc_now(), "expires_utc": expires.isoformat()}
    insert(lab, "armings", file=loaded.measurement.name, without=json.dumps(dict(without or {})), **row)
    return None


def is_armed(loaded: Loaded, lab: Path) -> bool:
    """Return whether a start of this description is armed now."""
    return bool(_armings(loaded, lab))


def arming_of(loaded: Loaded, lab: Path) -> dict[str, Any]:
    """Return who armed the next start, when, and which bench records it does without and why; or nothing."""
    valid = [] if loaded.rig.simulated else _armings(loaded, lab)
    if not valid:
        return {}
    return {"by": valid[0]["who"], "utc": valid[0]["utc"], "without": json.loads(valid[0]["without"])}


def _armings(loaded: Loaded, lab: Path) -> list[dict[str, Any]]:
    now = datetime.now(UTC)
    unused = select(lab, "armings", "sha256 = ? AND used_utc IS NULL", (digest_of(loaded),))
    return [row for row in unused if datetime.fromisoformat(row["expires_utc"]) > now]


def use_arming(loaded: Loaded, lab: Path) -> str:
    """Use up the arming of one start and return nothing, or return why the start may not be made."""
    if loaded.rig.simulated:
        return ""
    valid = _armings(loaded, lab)
    if not valid:
        return "nobody has armed this description within 24 hours"
    update(lab, "armings", valid[0]["id"], used_utc=utc_now())
    return ""


def digest_of(loaded: Loaded) -> str:
    """Return one SHA-256 over the description's files, so that a changed file is not armed any more."""
    whole = sha256()
    for name in sorted(loaded.texts):
        whole.update(name.encode() + b"\0" + loaded.texts[name] + b"\0")
    return whole.hexdigest()


def _device_checks(loaded: Loaded) -> Iterator[Check]:
    try:
        with open_devices(loaded.rig, RealClock()) as devices:
            yield Check("identities", True, "; ".join(device.identity() for device in devices.all))
            yield from _axis_checks(devices)
            yield from _sensor_checks(devices)
    except DaqError as error:
        yield Check("devices", False, str(error))


def _bench_checks(loaded: Loaded, lab: Path, without: Mapping[str, str]) -> Iterator[Check]:
    """Yield what is recorded of every bench task that has to be done before; a typed reason stands in."""
    for task in loaded.measurement.ready.tasks:
        found, why = newest(lab, task, loaded.rig)
        if found is not None:
            age_d = (datetime.now(UTC) - datetime.fromisoformat(found["at_utc"])).total_seconds() / 86_400
            seen = f"{found['verdict']}, {age_d:.1f} days old ({found['record']}): {found['sentence']}"
            yield Check(f"bench {task}", True, seen)
        elif task in without:
            yield Check(f"bench {task}", True, f"left out, because {without[task]} ({why})")
        else:
            remedy = f"do `tercet task {task}`, or say why not: --without '{task}=reason'"
            yield Check(f"bench {task}", False, f"{why}; {remedy}")


def _axis_checks(devices: Devices) -> Iterator[Check]:
    for stage in devices.stages:
        state = stage.state()
        low_mm, high_mm = stage.limits_mm
        sound = state.homed and low_mm <= state.encoder_mm <= high_mm and not state.alarm
        place = f"at {state.encoder_mm:g} mm of {low_mm:g} .. {high_mm:g}"
        seen = ", ".join(filter(None, ("homed" if state.homed else "not homed", place, state.alarm)))
        yield Check(f"axis {stage.name}", sound, seen)


def _sensor_checks(devices: Devices) -> Iterator[Check]:
    for sensor in devices.sensors:
        values = ", ".join(f"{key} {value:g} {unit}" for key, (value, unit) in sensor.read().items())
        yield Check(f"sensor {sensor.name}", bool(values), values or "no value")


def _disk(lab: Path, loaded: Loaded) -> Check:
    itinerary = loaded.itinerary()
    free = free_bytes(lab)
    needed = wanted_bytes(len(itinerary), events_due(itinerary, loaded.rig.list_mode))
    return Check(
        "disk", free > needed, f"{free / 1e9:.1f} GB free, {needed / 1e9:.1f} GB wanted for the night"
    )


def _clock(now: datetime) -> Check:
    return Check("clock", now > EARLIEST, f"{now:%Y-%m-%d %H:%M} UTC")


def _messages(messages: Messages | None) -> Check:
    many = 0 if messages is None else len(messages.urgent)
    seen = f"addresses for urgent messages: {many}" if many else "lab.toml has no [messages]"
    return Check("messages", bool(many), seen)


def _rehearsed(loaded: Loaded, lab: Path) -> Check:
    """Return whether this very measurement, on whatever rig, was rehearsed to its end in this lab."""
    mine = _without_rig(loaded)
    for folder in reversed(runs(lab)):
        meta = read_meta(folder)
        if meta["kind"] != "rehearsal" or not meta.get("finished"):
            continue
        if _without_rig(load_run(folder, NO_WISHES)) == mine:
            return Check("rehearsal", True, f"rehearsed as {folder.name}")
    return Check("rehearsal", False, "this description was not rehearsed in this lab, or was changed since")


def _without_rig(loaded: Loaded) -> Measurement:
    return loaded.measurement.model_copy(update={"rig": ""})
