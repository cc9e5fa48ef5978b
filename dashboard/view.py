"""What the page says of a run, from its `live.json` alone: every sentence is made here, from data."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from typing import Any

from daq import openings
from daq.storage.people import NOBODY, Person
from dashboard.operate import acknowledging
from dashboard.residual import residual_view
from dashboard.times import clock, duration
from dashboard.verdict import verdict
from dashboard.words import capital, fixed, general, spelt, stopped

Feed = Mapping[str, Any]
SILENT_AFTER_S = 30.0
CAUTION = (
    "Hold and stop here are requests to the program, not safety functions. "
    "In danger use the emergency stop in the room."
)
_KINDS = {
    "rehearsal": ("Rehearsal", "Simulated hardware; nothing in the room moves."),
    "replay": ("Replay", "An archived run, played again; nothing in the room moves."),
}


def view(feed: Feed, silent: bool, person: Person = NOBODY) -> dict[str, Any]:
    """Return everything that the page says in words, by part of the page.

    Parameters
    ----------
    feed
        The content of `live.json`, format 1.
    silent
        Whether the run stopped writing although it has not ended (`is_silent`).
    person
        Who reads: an operator may take note of a warning.
    """
    return {
        "header": {"title": feed["title"], "run": feed["run"], "kind": _kind(feed)},
        "verdict": verdict(feed, silent),
        "warnings": _warnings(feed, silent, person),
        "kappa": residual_view(feed),
        "rail": _rail(feed),
        "now": _now(feed, silent),
        "sensors": [_sensor(name, *reading) for name, reading in feed["sensors"].items()],
        "log": [
            {"utc": clock(entry["utc"]), "text": stopped(entry["text"])} for entry in reversed(feed["log"])
        ],
    }


def is_silent(feed: Feed, now_utc: datetime) -> bool:
    """Return whether a run that has not ended wrote nothing for half a minute of the wall clock."""
    written = datetime.fromisoformat(feed["written_utc"])
    return not feed["ended"] and (now_utc - written).total_seconds() > SILENT_AFTER_S


def empty_view(lab: str) -> dict[str, Any]:
    """Return what the page says when the lab holds no run."""
    return {
        "header": {"title": lab, "run": "", "kind": None},
        "verdict": {
            "tone": "wait",
            "first": "No run yet.",
            "second": "",
            "line": "This page shows the newest run of the lab as soon as there is one. "
            "Start one with: tercet run FILE --into LAB, or tercet rehearse --into LAB.",
            "ends_utc": None,
            "progress": None,
        },
    }


def waiting_view(run: str) -> dict[str, Any]:
    """Return what the page says of a run that has a folder and has sent nothing yet."""
    verdict = {"tone": "wait", "first": "Nothing heard of this run yet.", "second": ""}
    line = "Its folder is there, its first news is not. The page shows it as soon as it comes."
    return {
        "header": {"title": run, "run": run, "kind": None},
        "verdict": verdict | {"line": line, "ends_utc": None, "progress": None},
    }


def unreadable_view(run: str, why: str) -> dict[str, Any]:
    """Return what the page says when the feed of a run cannot be read."""
    verdict = {"tone": "stop", "first": "This run cannot be read.", "second": "", "line": why}
    return {
        "header": {"title": run, "run": run, "kind": None},
        "verdict": verdict | {"ends_utc": None, "progress": None},
    }


def _sensor(name: str, value: float | None, unit: str) -> str:
    plain = name.replace("_", " ")
    return f"{plain} not read" if value is None else f"{plain} {general(value)} {unit}"


def _kind(feed: Feed) -> dict[str, str] | None:
    if feed["kind"] not in _KINDS:
        return None
    word, says = _KINDS[feed["kind"]]
    return {"kind": feed["kind"], "word": word, "says": says}


def _warnings(feed: Feed, silent: bool, person: Person) -> dict[str, Any]:
    items, since = feed["warnings"], clock(feed["started_utc"])
    until = f" up to the last news at {clock(feed['written_utc'])}" if silent else ""
    return {
        "heading": "To look at" if items else "Warnings",
        "none": None if items else f"None since the start at {since}{until}.",
        "items": [
            _warning(feed, warning) | {"button": acknowledging(feed, person, warning)} for warning in items
        ],
    }


def _warning(feed: Feed, warning: Mapping[str, Any]) -> dict[str, Any]:
    return {
        "what": stopped(warning["what"]),
        "did": stopped(warning["did"]) if warning.get("did") else "",
        "cost": stopped(warning["cost"]) if warning.get("cost") else "",
        "do": stopped(warning["do"]),
        "good": stopped(warning["good"]),
        "since": f"Since {clock(warning['since_utc'])}.",
        "since_utc": warning["since_utc"] if feed["clock"] == "real" else None,
        "seen": _seen(warning.get("acknowledged")),
    }


def _seen(noted: Mapping[str, Any] | None) -> str | None:
    return None if noted is None else f"Seen by {noted['by']} at {clock(noted['utc'])}."


def _rail(feed: Feed) -> dict[str, Any]:
    slits = feed["slits"]
    groups = [_group(feed, number) for number in range(slits + 1)]
    return {
        "slits": slits,
        "groups": [group for group in groups if group["openings"]],
        "says": "Add the patterns marked +, take away those marked −. "
        "If interference is only pairwise, nothing but noise is left."
        if slits > 2
        else "Add the patterns marked +, take away those marked −: what is left is the interference.",
    }


def _group(feed: Feed, number: int) -> dict[str, Any]:
    slits = feed["slits"]
    label = "none" if number == 0 else "all" if number == slits else spelt(number, "slit")
    masks = [mask for mask in feed["openings"] if mask.bit_count() == number]
    return {
        "label": label,
        "added": (slits - number) % 2 == 0,
        "openings": [{"mask": mask, "name": openings.name(mask)} for mask in masks],
    }


def _now(feed: Feed, silent: bool) -> dict[str, Any]:
    visit = feed["visit"]
    going = feed["state"] in ("moving", "counting") and not feed["ended"] and not silent
    doing = _doing(feed, going, silent)
    if visit is None:
        return {"mask": None, "says": doing}
    again = f", attempt {visit['attempt']}" if visit["attempt"] > 1 else ""
    place = f"at {fixed(visit['position_mm'], 2, plus=True)} mm"
    return {
        "mask": visit["opening"] if going else None,
        "says": f"{doing} Latest visit: {_through(visit['opening'])} {place}{again}.",
    }


def _doing(feed: Feed, going: bool, silent: bool) -> str:
    if silent:
        return "Not known."
    if not going:
        return "Nothing is being counted."
    return f"{capital(feed['state'])}; {duration(feed['run_s'])} into the run."


def _through(mask: int) -> str:
    name = openings.name(mask)
    if name == openings.NONE:
        return "with every slit shut"
    letters = list(name)
    return f"through {', '.join(letters[:-1])} and {letters[-1]}" if len(letters) > 1 else f"through {name}"
