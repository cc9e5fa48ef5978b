"""What an operator may ask of a run, and the sentence that says beforehand what will happen."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from daq.storage.people import Person
from dashboard.times import clock
from dashboard.words import count

Feed = Mapping[str, Any]
NOT_SAFE = "This is a request over a data link, no safety function."
MUTE_MIN = "480"
GOING, HELD = ("moving", "counting"), ("holding",)


@dataclass(frozen=True, slots=True)
class Act:
    """One thing to ask: its button, the states of a run in which it is offered, and what will happen."""

    label: str
    states: tuple[str, ...]
    will: str


ACTS: Mapping[str, Act] = {
    "hold": Act(
        "Hold",
        GOING,
        "The run finishes the stand under way and then waits, with every stage where it is, until somebody "
        "resumes it. Everything counted is saved. The night gets longer by the time it waits.",
    ),
    "resume": Act(
        "Resume",
        HELD,
        "The run goes on with the next stand: mask and detector will move. "
        "Be sure that nobody is at the bench.",
    ),
    "end-after-lap": Act(
        "End after this lap",
        GOING,
        "The run ends at the edge of the present lap, the stages go to their place of rest, and the run is "
        "finished for good. {done}",
    ),
    "park": Act(
        "End and park",
        (*GOING, *HELD),
        "The run ends after the stand under way, the stages go to their place of rest, and the run is "
        "finished for good. {done}",
    ),
    "acknowledge": Act(
        "I have seen this",
        (),
        "The others see that you know of this warning, and nobody is sent word of it again. It stays on the "
        "page until its cause is gone.",
    ),
    "mute": Act(
        "Mute messages",
        (*GOING, *HELD),
        "Nobody is sent word of this run for the next 8 hours, whatever happens to it. The page goes on "
        "telling everything.",
    ),
}


def operate_view(
    feed: Feed, silent: bool, person: Person, requests: Sequence[Mapping[str, Any]]
) -> dict[str, Any]:
    """Return what a person may ask of a run now, and what was asked of it before, newest first."""
    may = person.may("operator")
    offered = [] if not may or silent or feed["ended"] else _offered(feed)
    return {
        "acts": offered,
        "says": _says(feed, silent, person),
        "asked": [request_line(request) for request in reversed(requests)],
    }


def acknowledging(feed: Feed, person: Person, warning: Mapping[str, Any]) -> dict[str, str] | None:
    """Return the button that takes note of a warning; None for a watcher, or when somebody has."""
    if not person.may("operator") or feed["ended"] or warning.get("acknowledged"):
        return None
    return _button("acknowledge", feed, str(warning.get("id", warning["kind"])))


def _offered(feed: Feed) -> list[dict[str, str]]:
    offered = [what for what, act in ACTS.items() if feed["state"] in act.states]
    if _at_bench(feed):
        offered.remove("resume")
    return [_button(what, feed, MUTE_MIN if what == "mute" else "") for what in offered]


def _at_bench(feed: Feed) -> bool:
    return feed["state"] in HELD and bool((feed.get("holding") or {}).get("at_bench"))


def _button(what: str, feed: Feed, about: str = "") -> dict[str, str]:
    kappa = feed["kappa"]
    done = f"{count(kappa['pairs'])} of {count(kappa['planned_pairs'])} pairs are counted by now."
    will = ACTS[what].will.format(done=done)
    safe = "" if what in ("acknowledge", "mute") else f" {NOT_SAFE}"
    return {
        "what": what,
        "label": ACTS[what].label,
        "will": will + safe,
        "about": about,
        "run": str(feed["run"]),
    }


def _says(feed: Feed, silent: bool, person: Person) -> str:
    if feed["ended"]:
        return "The run has ended; nothing can be asked of it any more."
    if silent:
        return "The run does not answer, so nothing can be asked of it from here."
    if not person.may("operator"):
        return "You may look. Operators, whom `tercet people` lets in, may also ask something of the run."
    if _at_bench(feed):
        return "This hold is cleared at the bench only, with `tercet resume LAB --at-bench`."
    return f"You are {person.name}, operator."


def request_line(request: Mapping[str, Any]) -> str:
    """Return who asked what and when, and what became of it."""
    act = ACTS.get(request["what"])
    label = act.label if act else str(request["what"]).capitalize()
    asked = f"{label}: asked by {request['who']} at {clock(request['utc'])}"
    return f"{asked}, {request['outcome']}." if request["outcome"] else f"{asked}, not heard yet."
