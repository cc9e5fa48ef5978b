"""Blinding a run: promised before its first count, or later; frozen with its analysis; revealed for good."""

from __future__ import annotations

import getpass
import hashlib
import json
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from daq.description.measurement import Hidden
from daq.errors import DescriptionError, StorageError
from daq.estimate.blinding import BLINDED, FROZEN, OPEN, REVEALED, Blinding, blind_digest, blind_offset
from daq.estimate.contrast import order_terms
from daq.service.live import tell_again
from daq.storage.blinding import (
    SCOPE,
    Event,
    append_event,
    blinding_of,
    copy_events,
    lab_of,
    make_secret,
    read_events,
    scope_events,
    state_of,
)
from daq.storage.lab import runs
from daq.storage.log import RunLog
from daq.storage.reader import open_visits, read_meta

OF_THE_RUN = "run"
PER_SE = 10  # half width in standard errors of the plan: below three it hides nothing
ANALYSIS = (
    *("slits", "openings", "positions_mm", "weights", "signs", "normalisation", "dead_time_s"),
    *("dead_time_kind", "planned_pairs", "counting", "fano", "monitor_channel", "heralded", "quality"),
)


def promise(lab: Path, run: str, slits: int, asked: Mapping[str, str]) -> dict[str, Any]:
    """Return what the attributes of a run say of its blinding before the first count: commitments only.

    Parameters
    ----------
    asked
        `scope` ("run", or the name of a campaign) and `halfwidth`, the literal decimal number.

    Raises
    ------
    DescriptionError
        When the campaign was frozen or revealed before, or is blinded with another half width.
    """
    scope = run if asked["scope"] == OF_THE_RUN else asked["scope"]
    known = scope_events(lab, scope)
    if state_of(known) not in (OPEN, BLINDED):
        raise DescriptionError(
            (f"blinding.scope: {scope!r} is {state_of(known)} already. Choose another name for new runs.",)
        )
    if known and known[0]["halfwidth"] != asked["halfwidth"]:
        raise DescriptionError(
            (f"blinding.halfwidth: {scope!r} was begun with {known[0]['halfwidth']}. Give the same.",)
        )
    secret = make_secret(lab)
    terms = [term for term in order_terms(slits) if len(term) > 2]
    return {
        "blinding": BLINDED,
        "blinding_scope": scope,
        "blinding_halfwidth": asked["halfwidth"],
        "blinding_commitments": {
            term: blind_offset(secret, scope, term, asked["halfwidth"])[1] for term in terms
        },
    }


def keep_promise(folder: Path, meta: Mapping[str, Any], by: str, **more: Any) -> None:
    """Write the events that blind a run to the record of its scope, and its own copy."""
    lab, scope = lab_of(folder), str(meta["blinding_scope"])
    if not scope_events(lab, scope):
        said = {"scope": scope, "halfwidth": meta["blinding_halfwidth"]}
        said |= {"commitments": meta["blinding_commitments"], "key_id": key_id(make_secret(lab))}
        _append(lab, scope, "blind.open", by, **said)
    _append(lab, scope, "blind.run", by, run=folder.name, **more)
    copy_events(lab, scope, folder)


def blind(folder: Path, scope: str, halfwidth: str | None, by: str | None) -> Event:
    """Blind a finished run from now on; the record says that its counts could be seen before.

    Raises
    ------
    DescriptionError, StorageError
        When it is blinded already, under way, or cannot be.
    """
    meta = read_meta(folder)
    if not meta.get("finished"):
        raise DescriptionError(
            (f"{folder}: it goes on. Blind it when it is over; or a new one, by [blinding] in its file.",)
        )
    if blinding_of(folder, meta).state != OPEN:
        raise DescriptionError((f"{folder}: it is blinded already, and there is no way back.",))
    if int(meta["slits"]) < 3 or meta["normalisation"] != "pairwise":
        raise DescriptionError(
            (f"{folder}: only a residual of three slits or more, normalised pairwise, can be blinded.",)
        )
    halfwidth = _wide_enough(meta) if halfwidth is None else halfwidth
    if scope != OF_THE_RUN and not SCOPE.fullmatch(scope):
        raise DescriptionError((f"--scope: {scope!r} is no name; use letters, digits, . _ and -.",))
    if not _is_halfwidth(halfwidth):
        raise DescriptionError((f"--halfwidth: a number above zero like 0.001, not {halfwidth!r}.",))
    lab = lab_of(folder)
    found = promise(lab, folder.name, int(meta["slits"]), {"scope": scope, "halfwidth": halfwidth})
    keep_promise(folder, found, by or getpass.getuser(), after_counts=True)
    tell_again(folder)
    _log(folder, "blinded", by, scope=found["blinding_scope"])
    return read_events(folder)[-1]


def freeze(folder: Path, by: str | None) -> Event:
    """Freeze the analysis of a scope: settings, runs and what they leave out; no run joins it afterwards."""
    events, scope = _of_scope(folder)
    state = state_of(events)
    if state != BLINDED:
        return next(event for event in events if event["event"] == "analysis.freeze")
    members = _members(folder, events)
    unfinished = [run.name for run in members if not read_meta(run).get("finished")]
    if unfinished:
        raise DescriptionError(
            (f"{unfinished[0]} is not finished. Finish every run of {scope!r}, then freeze.",)
        )
    event = _append(lab_of(folder), scope, "analysis.freeze", by, **_analysis(members))
    _tell_members(members, scope, "analysis frozen", by)
    return event


def reveal(folder: Path, by: str | None, typed: Callable[[str], str]) -> Event:
    """Reveal a frozen scope after its name was typed; a second time the first answer is given again.

    Raises
    ------
    DescriptionError
        When it is not frozen, the analysis has changed since, or the name is not the one.
    """
    events, scope = _of_scope(folder)
    state = state_of(events)
    if state == REVEALED:
        return next(event for event in events if event["event"] == "blind.reveal")
    if state != FROZEN:
        raise DescriptionError((f"{folder}: freeze the analysis first, with `tercet blind RUN --freeze`.",))
    members = _members(folder, events)
    frozen = next(event for event in events if event["event"] == "analysis.freeze")
    now = _analysis(members)
    if any(frozen[key] != now[key] for key in now):
        raise DescriptionError(
            (f"{folder}: runs or settings are not those that were frozen. Bring them back, then reveal.",)
        )
    question = f"There is no way back. Type the scope ({scope}) to reveal {len(members)} run(s): "
    if typed(question).strip() != scope:
        raise DescriptionError((f"{folder}: the scope was not typed, so nothing is revealed.",))
    lab, first = lab_of(folder), events[0]
    blinding_of(folder, read_meta(folder))  # refuses where the secret is not the one that was committed to
    secret, halfwidth = make_secret(lab), str(first["halfwidth"])
    digests = {term: blind_digest(secret, scope, term, halfwidth).hex() for term in first["commitments"]}
    event = _append(lab, scope, "blind.reveal", by, scope=scope, halfwidth=halfwidth, digests=digests)
    _tell_members(members, scope, "revealed", by)
    return event


def at_hand(folder: Path, meta: Mapping[str, Any]) -> Blinding:
    """Return the blinding of a run that can be shown, as much as it may be.

    Raises
    ------
    StorageError
        When it is hidden and the secret is not at hand.
    """
    found = blinding_of(folder, meta)
    if found.hides and not found.offsets:
        raise StorageError(
            "this run is blinded, and the secret that hides its kappa is not in its lab, so nothing is shown",
            where=str(folder),
            remedy="Read it in the lab in which it was taken, or reveal it there",
        )
    return found


def key_id(secret: bytes) -> str:
    """Return a name for a secret that tells nothing of it."""
    return hashlib.sha256(b"kappa-key/1\n" + secret).hexdigest()[:16]


def refuse_hidden(folder: Path, raw: bool, what: str, by: str | None = None) -> None:
    """Refuse to give raw counts of a blinded run away, or note who wanted it all the same.

    Raises
    ------
    StorageError
        While the run is blinded, without `raw`.
    """
    if not blinding_of(folder, read_meta(folder)).hides:
        return
    if not raw:
        raise StorageError(
            f"the run is blinded, and {what} holds its raw counts",
            where=str(folder),
            remedy="Reveal it first, or say --raw, which is written to its log",
        )
    _log(folder, f"raw {what} while blinded", by)


def _is_halfwidth(text: str) -> bool:
    """Return whether a text is the half width of an offset, as a description may give it."""
    try:
        Hidden(halfwidth=text)
    except ValidationError:
        return False
    return True


def _wide_enough(meta: Mapping[str, Any]) -> str:
    planned = meta.get("goal_se") or meta.get("results", {}).get("kappa_se")
    if not planned:
        raise DescriptionError(("--halfwidth: give one; this run has neither a goal nor an error bar.",))
    return f"{PER_SE * float(planned):.0e}"


def _of_scope(folder: Path) -> tuple[list[Event], str]:
    events = read_events(folder)
    if not events:
        raise DescriptionError((f"{folder}: it is not blinded. Blind it with `tercet blind RUN`.",))
    return events, str(events[0]["scope"])


def _members(folder: Path, events: list[Event]) -> list[Path]:
    names = {event["run"] for event in events if event["event"] == "blind.run"}
    return [run for run in runs(lab_of(folder)) if run.name in names]


def _analysis(members: list[Path]) -> dict[str, Any]:
    """Return what is frozen: settings by their hash, every run by its digest and what is left out of it."""
    settings, found = hashlib.sha256(), {}
    for run in members:
        visits = open_visits(run)
        said = {key: visits.attrs.get(key) for key in ANALYSIS}
        settings.update(json.dumps(said, sort_keys=True).encode())
        found[run.name] = {
            "digest": visits.attrs.get("digest"),
            "visits_not_used": int((visits["use"].values == 0).sum()),
        }
    return {"config_sha256": settings.hexdigest(), "runs": found}


def _tell_members(members: list[Path], scope: str, what: str, by: str | None) -> None:
    for run in members:
        copy_events(lab_of(run), scope, run)
        _log(run, what, by, scope=scope)
        tell_again(run)


def _append(lab: Path, record: str, event: str, by: str | None, **fields: Any) -> Event:
    now = datetime.now(UTC).isoformat(timespec="seconds").replace("+00:00", "Z")
    return append_event(lab, record, {"event": event, "time": now, "by": by or getpass.getuser(), **fields})


def _log(folder: Path, what: str, by: str | None, **fields: Any) -> None:
    now = datetime.now(UTC).isoformat(timespec="seconds")
    RunLog(folder).append(what, utc=now, by=by or getpass.getuser(), **fields)
