"""The blinding record of a run or a campaign: a chain of events beside the runs, and the lab's secret.

`blinding/<scope>.jsonl` of the lab holds the events, each with the hash of the one before it; every run of
the scope keeps a copy, so that a revealed run carries its proof. `blinding/secret` never leaves the lab.
"""

from __future__ import annotations

import json
import os
import re
import secrets
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from daq.errors import StorageError
from daq.estimate.blinding import (
    BLINDED,
    FROZEN,
    GENESIS,
    OPEN,
    REVEALED,
    Blinding,
    blind_digest,
    chained,
    commitment,
    revealed_offset,
)
from daq.storage.disk import Disk, write_durably
from daq.storage.trouble import rim

Event = dict[str, Any]
FOLDER, SECRET, COPY = "blinding", "secret", "blinding.jsonl"
SCOPE = re.compile(r"[A-Za-z0-9][A-Za-z0-9._-]*")
_STATES = {"blind.open": BLINDED, "analysis.freeze": FROZEN, "blind.reveal": REVEALED}


def blinding_of(folder: Path, meta: Mapping[str, Any]) -> Blinding:
    """Return what is hidden of a run; without offsets where its lab's secret is not at hand.

    Raises
    ------
    StorageError
        When the record of the blinding was changed, or the secret is not the one that was committed to.
    """
    events = read_events(folder)
    if not events:
        return Blinding(str(meta.get("blinding", OPEN)))
    state, first = state_of(events), events[0]
    scope = str(first["scope"])
    if state == REVEALED:
        return Blinding(state, revealed_offsets(events), scope)
    secret = read_secret(lab_of(folder))
    return Blinding(state, {} if secret is None else _offsets(secret, first, folder), scope)


def read_events(folder: Path) -> list[Event]:
    """Return the events of a run's blinding, checked: those of its lab, else its own copy."""
    mine = _events(folder / COPY)
    if not mine:
        return []
    record = record_path(lab_of(folder), str(mine[0]["scope"]))
    ours = _events(record) if record.exists() else []
    if ours and ours[: len(mine)] != mine:
        raise StorageError(
            "the blinding record of this run is not the one of its lab",
            where=str(folder / COPY),
            remedy=f"Compare it with {record}: neither may be edited",
        )
    return ours or mine


def scope_events(lab: Path, scope: str) -> list[Event]:
    """Return the events of a scope, checked; none where it was never used."""
    path = record_path(lab, scope)
    return _events(path) if path.exists() else []


def append_event(lab: Path, scope: str, event: Mapping[str, Any]) -> Event:
    """Add an event to the record of a scope, durably, with the hash that binds it to those before."""
    before = scope_events(lab, scope)
    whole = {"seq": len(before), **event}
    done = {**whole, "hash": chained(before[-1]["hash"] if before else GENESIS, whole)}
    path = record_path(lab, scope)
    with rim(path):
        path.parent.mkdir(parents=True, exist_ok=True)
        write_durably(Disk(), path, _text([*before, done]))
        Disk().sync_dir(path.parent)
    return done


def copy_events(lab: Path, scope: str, folder: Path) -> None:
    """Keep a copy of the record of a scope in the folder of a run."""
    with rim(folder / COPY):
        write_durably(Disk(), folder / COPY, _text(scope_events(lab, scope)))


def state_of(events: list[Event]) -> str:
    """Return the state that events lead to; there is no way back."""
    found = [_STATES[event["event"]] for event in events if event["event"] in _STATES]
    return found[-1] if found else OPEN


def revealed_offsets(events: list[Event]) -> dict[str, float]:
    """Return the offsets that were published, each checked against its commitment."""
    first, last = events[0], next(event for event in events if event["event"] == "blind.reveal")
    scope, halfwidth = str(first["scope"]), str(first["halfwidth"])
    offsets = {}
    for term, digest in last["digests"].items():
        if commitment(bytes.fromhex(digest), scope, term, halfwidth) != first["commitments"][term]:
            raise _changed(f"the digest of {term} does not give the commitment")
        offsets[term] = revealed_offset(bytes.fromhex(digest), halfwidth)
    return offsets


def read_secret(lab: Path) -> bytes | None:
    """Return the secret of a lab, None where it has none; refused where others may read it."""
    path = lab / FOLDER / SECRET
    try:
        if path.stat().st_mode & 0o077:
            raise StorageError(
                "the secret of the blinding may be read by others",
                where=str(path),
                remedy="Run: chmod 600 on it",
            )
        return path.read_bytes()
    except OSError:
        return None


def make_secret(lab: Path) -> bytes:
    """Return the secret of a lab, made the first time: 32 random bytes that only its owner may read."""
    path = lab / FOLDER / SECRET
    with rim(path):
        path.parent.mkdir(parents=True, exist_ok=True)
        try:
            handle = os.open(path, os.O_WRONLY | os.O_CREAT | os.O_EXCL, 0o600)
        except FileExistsError:
            pass
        else:
            with os.fdopen(handle, "wb") as file:
                file.write(secrets.token_bytes(32))
                file.flush()
                os.fsync(file.fileno())
    secret = read_secret(lab)
    if secret is None or len(secret) < 32:
        raise StorageError(
            "the secret of the blinding cannot be read", where=str(path), remedy="Check its owner"
        )
    return secret


def lab_of(folder: Path) -> Path:
    """Return the lab that a run folder stands in."""
    return Path(folder).resolve().parents[1]


def record_path(lab: Path, scope: str) -> Path:
    """Return where the record of a scope stands."""
    return lab / FOLDER / f"{scope}.jsonl"


def _offsets(secret: bytes, first: Event, folder: Path) -> dict[str, float]:
    scope, halfwidth = str(first["scope"]), str(first["halfwidth"])
    offsets = {}
    for term, promised in first["commitments"].items():
        digest = blind_digest(secret, scope, term, halfwidth)
        if commitment(digest, scope, term, halfwidth) != promised:
            raise StorageError(
                "the secret of this lab is not the one that hides this run, so nothing of it is shown",
                where=str(folder),
                remedy=f"Bring back the file {FOLDER}/{SECRET} with which it was blinded",
            )
        offsets[term] = revealed_offset(digest, halfwidth)
    return offsets


def _events(path: Path) -> list[Event]:
    """Return the events of a file, every hash compared."""
    try:
        lines = path.read_text("ascii").splitlines()
    except FileNotFoundError:
        return []
    except (OSError, UnicodeDecodeError) as error:
        raise _changed(str(error), path) from error
    before, found = GENESIS, list[Event]()
    for line in lines:
        try:
            event = json.loads(line)
            rest = {key: value for key, value in event.items() if key != "hash"}
            good = event["hash"] == chained(before, rest) and event["seq"] == len(found)
        except (ValueError, KeyError, TypeError, AttributeError):
            good = False
        if not good:
            raise _changed(f"line {len(found) + 1} is not what was written", path)
        before = event["hash"]
        found.append(event)
    return found


def _changed(what: str, path: Path | None = None) -> StorageError:
    return StorageError(
        f"the blinding record was changed: {what}",
        where="" if path is None else str(path),
        remedy="It may be added to by `tercet blind` alone; bring back an untouched copy",
    )


def _text(events: list[Event]) -> bytes:
    return "".join(f"{json.dumps(event, sort_keys=True)}\n" for event in events).encode("ascii")
