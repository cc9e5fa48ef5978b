"""Whether anybody is needed: the first thing on the page, from the feed alone."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from typing import Any

from dashboard.times import clock, day_and_clock
from dashboard.words import capital, count, spelt, stopped

Feed = Mapping[str, Any]
_DAY_SAID_FROM_S = 20 * 3600
_GOING = {"run": "Running.", "rehearsal": "Rehearsal running.", "replay": "Replay running."}


def verdict(feed: Feed, silent: bool) -> dict[str, Any]:
    """Return whether anybody is needed, as a mark and two sentences, and how far the run is."""
    tone, first, second = _silence(feed) if silent else _judgement(feed)
    line, ends_utc = _line(feed, silent)
    return {
        "tone": tone,
        "first": first,
        "second": second,
        "line": line,
        "ends_utc": ends_utc if feed["clock"] == "real" else None,
        "progress": _progress(feed),
    }


def _progress(feed: Feed) -> float | None:
    visit, kappa = feed["visit"], feed["kappa"]
    if visit is None:
        return 0.0
    if visit["number"] >= 0:
        return round((visit["number"] + 1) / visit["of"], 4)
    return round(kappa["pairs"] / kappa["planned_pairs"], 4) if kappa["planned_pairs"] else None


def _silence(feed: Feed) -> tuple[str, str, str]:
    written = clock(feed["written_utc"])
    return "stop", f"No news from the run since {written}.", "Someone is needed."


def _judgement(feed: Feed) -> tuple[str, str, str]:
    state = feed["state"]
    if state == "ended" or feed["ended"]:
        return _ending(feed)
    if state == "ready":
        return "wait", "Ready.", "Not started yet."
    if state == "holding":
        return _holding(feed)
    if state == "parking":
        return "look", "Parking.", "The stages go to their safe place."
    return _going(feed)


def _holding(feed: Feed) -> tuple[str, str, str]:
    held = feed.get("holding") or {}
    if held.get("cause") == "asked":
        return "look", "Holding.", "As somebody asked."
    if held and not (held["at_bench"] or _wakes(feed)):
        return "look", "Holding.", "It goes on by itself when this is over."
    return "stop", "Holding.", "Someone is needed."


def _going(feed: Feed) -> tuple[str, str, str]:
    first = _GOING[feed["kind"]]
    if not feed["warnings"]:
        return "fine", first, "Nobody is needed."
    if _wakes(feed):
        return "stop", first, "Someone is needed."
    things = f"{capital(spelt(len(feed['warnings']), 'thing'))} to look at."
    return "look", first, f"{things} κ is in doubt." if feed.get("in_doubt") else things


def _wakes(feed: Feed) -> bool:
    return any(warning.get("level") == "wake" for warning in feed["warnings"])


def _ending(feed: Feed) -> tuple[str, str, str]:
    kappa = feed["kappa"]
    if kappa["pairs"] >= kappa["planned_pairs"]:
        return "done", "Done.", f"All {spelt(kappa['planned_pairs'], 'pair')} are counted."
    return "look", "Ended early.", f"{kappa['pairs']} of {count(kappa['planned_pairs'])} pairs are counted."


def _line(feed: Feed, silent: bool) -> tuple[str, str | None]:
    """Return the line below the verdict, and the time it ends with, if it does."""
    where, ended = _where(feed), feed["ended"]
    if ended:
        return (
            f"{where}. {stopped(capital(ended['reason']))} Ended on {day_and_clock(ended['utc'])}.",
            ended["utc"],
        )
    if silent:
        return f"{where} was the last. Look at the computer at the bench: the program may have stopped.", None
    if feed["state"] == "holding" and feed.get("holding"):
        return f"{where}. {stopped(feed['holding']['why'])} Everything counted so far is saved.", None
    if feed["state"] in ("holding", "parking"):
        return f"{where}. Everything counted so far is saved.", None
    if feed["state"] == "ready":
        where = f"{capital(spelt(feed['kappa']['planned_pairs'], 'pair'))} are planned"
    kind = "replay" if feed["kind"] == "replay" else "rehearsal"
    own = f"On the {kind}'s own clock, done" if feed["clock"] == "virtual" else "Done"
    return f"{where}. {own} {_about(feed)}.", feed["ends_utc"]


def _about(feed: Feed) -> str:
    left = datetime.fromisoformat(feed["ends_utc"]) - datetime.fromisoformat(feed["updated_utc"])
    far = left.total_seconds() > _DAY_SAID_FROM_S
    return f"about {day_and_clock(feed['ends_utc'])}" if far else f"at about {clock(feed['ends_utc'])}"


def _where(feed: Feed) -> str:
    visit = feed["visit"]
    if visit is None:
        return "Before the first visit"
    if visit["number"] < 0:
        return "A check between planned visits"
    return f"Visit {count(visit['number'] + 1)} of {count(visit['of'])}"
