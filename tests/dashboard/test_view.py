"""What the page says: every sentence follows from the feed."""

from __future__ import annotations

import json
from datetime import UTC, datetime, timedelta
from typing import Any

import pytest

from dashboard.view import empty_view, is_silent, unreadable_view, view, waiting_view
from tests.dashboard.feeds import WARNING, ended, feed

NOW = datetime(2026, 12, 2, 2, 43, tzinfo=UTC)


def verdict(content: dict[str, Any], silent: bool = False) -> tuple[str, str, str]:
    said = view(content, silent)["verdict"]
    return said["tone"], said["first"], said["second"]


@pytest.mark.parametrize(
    ("content", "said"),
    [
        (feed(), ("fine", "Running.", "Nobody is needed.")),
        (feed(state="moving"), ("fine", "Running.", "Nobody is needed.")),
        (feed(kind="rehearsal"), ("fine", "Rehearsal running.", "Nobody is needed.")),
        (feed(kind="replay"), ("fine", "Replay running.", "Nobody is needed.")),
        (feed(warnings=[WARNING]), ("look", "Running.", "One thing to look at.")),
        (feed(warnings=[WARNING] * 3), ("look", "Running.", "Three things to look at.")),
        (feed(state="ready", visit=None, pairs=0), ("wait", "Ready.", "Not started yet.")),
        (feed(state="holding"), ("stop", "Holding.", "Someone is needed.")),
        (feed(state="parking"), ("look", "Parking.", "The stages go to their safe place.")),
        (ended(), ("done", "Done.", "All 19 pairs are counted.")),
        (ended(complete=False), ("look", "Ended early.", "11 of 19 pairs are counted.")),
    ],
)
def test_the_verdict_follows_from_state_and_warnings(content: dict[str, Any], said: tuple[str, ...]) -> None:
    assert verdict(content) == said


def test_a_run_that_stopped_writing_needs_someone_whatever_it_said_last() -> None:
    content = feed(written_utc="2026-12-02T02:10:00.250+00:00")

    assert verdict(content, silent=True) == (
        "stop",
        "No news from the run since 02:10 UTC.",
        "Someone is needed.",
    )


@pytest.mark.parametrize(
    ("content", "age_s", "silent"),
    [(feed(), 29, False), (feed(), 31, True), (feed(state="holding"), 31, True), (ended(), 1e6, False)],
)
def test_half_a_minute_without_writing_is_silence_unless_the_run_has_ended(
    content: dict[str, Any], age_s: float, silent: bool
) -> None:
    content["written_utc"] = (NOW - timedelta(seconds=age_s)).isoformat()

    assert is_silent(content, NOW) is silent


@pytest.mark.parametrize(
    ("content", "line"),
    [
        (feed(), "Visit 8 135 of 12 464. Done at about 06:08 UTC."),
        (
            feed(clock="virtual"),
            "Visit 8 135 of 12 464. On the rehearsal's own clock, done at about 06:08 UTC.",
        ),
        (feed(ends_utc="2026-12-04T06:08:00Z"), "Visit 8 135 of 12 464. Done about 4 December, 06:08 UTC."),
        (feed(state="holding"), "Visit 8 135 of 12 464. Everything counted so far is saved."),
        (feed(visit=None), "Before the first visit. Done at about 06:08 UTC."),
        (feed(state="ready", pairs=0), "19 pairs are planned. Done at about 06:08 UTC."),
        (
            ended(complete=False),
            "Visit 7 479 of 12 464. Ended by hand after this stand. Ended on 2 December, 02:11 UTC.",
        ),
    ],
)
def test_the_line_below_says_how_far_and_until_when(content: dict[str, Any], line: str) -> None:
    assert view(content, silent=False)["verdict"]["line"].replace("\u202f", " ") == line


def test_an_unplanned_visit_is_not_counted_as_visit_zero() -> None:
    content = feed()
    content["visit"]["number"] = -1

    said = view(content, silent=False)["verdict"]

    assert said["line"].startswith("A check between planned visits.")
    assert said["progress"] == pytest.approx(12 / 19, abs=1e-4)


def test_local_time_is_offered_only_for_the_real_clock() -> None:
    assert view(feed(), silent=False)["verdict"]["ends_utc"] == feed()["ends_utc"]
    assert view(feed(clock="virtual"), silent=False)["verdict"]["ends_utc"] is None


@pytest.mark.parametrize(("kind", "word"), [("rehearsal", "Rehearsal"), ("replay", "Replay")])
def test_what_is_not_a_run_says_so(kind: str, word: str) -> None:
    said = view(feed(kind=kind), silent=False)["header"]["kind"]

    assert said["word"] == word
    assert said["says"].endswith("nothing in the room moves.")


def test_a_run_carries_no_mark() -> None:
    assert view(feed(), silent=False)["header"]["kind"] is None


def test_the_title_is_the_run_s_own() -> None:
    assert view(feed(title="Moonlit slits"), silent=False)["header"]["title"] == "Moonlit slits"


def test_a_warning_says_what_happened_what_to_do_and_whether_kappa_is_good() -> None:
    said = view(feed(warnings=[WARNING]), silent=False)["warnings"]["items"][0]

    assert (said["what"], said["do"], said["good"]) == (WARNING["what"], WARNING["do"], WARNING["good"])
    assert said["since"] == "Since 00:12 UTC."


def test_a_silent_run_claims_nothing_after_its_last_news() -> None:
    said = view(feed(written_utc="2026-12-02T02:10:00.250+00:00"), silent=True)

    assert said["warnings"]["none"] == "None since the start at 20:15 UTC up to the last news at 02:10 UTC."
    assert said["now"]["says"].startswith("Not known.")


def test_without_warnings_the_page_says_since_when() -> None:
    assert view(feed(), silent=False)["warnings"]["none"] == "None since the start at 20:15 UTC."


@pytest.mark.parametrize("slits", [2, 3, 4, 5])
def test_every_opening_stands_once_under_its_sign_in_the_sum(slits: int) -> None:
    groups = view(feed(slits=slits), silent=False)["rail"]["groups"]

    openings = {opening["mask"]: group["added"] for group in groups for opening in group["openings"]}
    assert openings == {mask: (slits - mask.bit_count()) % 2 == 0 for mask in range(1 << slits)}


def test_for_three_slits_the_signs_are_those_of_the_third_order_sum() -> None:
    groups = view(feed(), silent=False)["rail"]["groups"]

    signed = {o["name"]: "+" if g["added"] else "-" for g in groups for o in g["openings"]}
    assert "".join(signed[name] for name in ("ABC", "AB", "AC", "BC", "A", "B", "C", "none")) == "+---+++-"


@pytest.mark.parametrize(
    ("changed", "says"),
    [
        ({}, "Counting; 6 h 28 min into the run. Latest visit: through A and C at +3.20 mm."),
        ({"state": "moving"}, "Moving; 6 h 28 min into the run. Latest visit: through A and C at +3.20 mm."),
        ({"state": "holding"}, "Nothing is being counted. Latest visit: through A and C at +3.20 mm."),
        ({"visit": None}, "Counting; 6 h 28 min into the run."),
    ],
)
def test_the_present_is_said_as_it_is(changed: dict[str, Any], says: str) -> None:
    assert view(feed(**changed), silent=False)["now"]["says"] == says


def test_a_repeated_visit_says_which_attempt_it_is() -> None:
    content = feed()
    content["visit"] |= {"opening": 0, "position_mm": -3.2, "attempt": 2}

    assert view(content, silent=False)["now"]["says"].endswith("with every slit shut at −3.20 mm, attempt 2.")


def test_sensors_keep_their_names_and_units() -> None:
    content = feed(sensors={"room_temperature": [-1.25, "°C"], "vacuum": [None, "hPa"]})

    assert view(content, silent=False)["sensors"] == ["room temperature −1.250 °C", "vacuum not read"]


def test_the_log_is_told_newest_first() -> None:
    said = view(feed(), silent=False)["log"]

    assert [entry["utc"] for entry in said] == ["22:16 UTC", "20:15 UTC"]
    assert said[1]["text"] == "The run started."


@pytest.mark.parametrize("said", [empty_view("lab"), waiting_view("a-run"), unreadable_view("a-run", "Why.")])
def test_a_page_without_news_still_has_a_verdict(said: dict[str, Any]) -> None:
    assert set(said["verdict"]) == {"tone", "first", "second", "line", "ends_utc", "progress"}
    assert said["verdict"]["first"]


@pytest.mark.parametrize("content", [feed(), feed(pairs=0, visit=None), ended(), feed(blinding="frozen")])
def test_what_the_page_says_is_plain_data(content: dict[str, Any]) -> None:
    said = view(content, silent=False)

    assert json.loads(json.dumps(said, allow_nan=False)) == said


HELD = {"cause": "asked", "why": "Kim asked the run to hold.", "since_utc": "x", "at_bench": False}


@pytest.mark.parametrize(
    ("held", "level", "tone", "second"),
    [
        (HELD, "note", "look", "As somebody asked."),
        (HELD | {"cause": "fault"}, "note", "look", "It goes on by itself when this is over."),
        (HELD | {"cause": "fault"}, "wake", "stop", "Someone is needed."),
        (HELD | {"cause": "interlock", "at_bench": True}, "note", "stop", "Someone is needed."),
    ],
)
def test_a_hold_says_whether_somebody_is_needed(held: Any, level: str, tone: str, second: str) -> None:
    said = view(feed(state="holding", holding=held, warnings=[WARNING | {"level": level}]), silent=False)

    assert (said["verdict"]["tone"], said["verdict"]["second"]) == (tone, second)
    assert "Kim asked the run to hold." in said["verdict"]["line"]


def test_a_warning_that_wakes_needs_someone_and_one_in_doubt_says_so() -> None:
    wakes = view(feed(warnings=[WARNING | {"level": "wake"}]), silent=False)["verdict"]
    doubts = view(feed(warnings=[WARNING], in_doubt=True), silent=False)["verdict"]

    assert (wakes["tone"], wakes["second"]) == ("stop", "Someone is needed.")
    assert doubts["second"] == "One thing to look at. κ is in doubt."


def test_a_warning_says_what_was_done_what_it_costs_and_who_has_seen_it() -> None:
    seen = {"by": "Kim", "utc": "2026-12-02T03:12:00Z"}
    warning = WARNING | {"did": "The run holds", "cost": "It loses 2 h", "acknowledged": seen}

    (item,) = view(feed(warnings=[warning]), silent=False)["warnings"]["items"]

    assert (item["did"], item["cost"]) == ("The run holds.", "It loses 2 h.")
    assert item["seen"] == "Seen by Kim at 03:12 UTC."
