"""What may be asked of a run, by whom and when."""

from __future__ import annotations

from typing import Any

import pytest

from daq.storage.people import NOBODY, Person
from dashboard.operate import ACTS, NOT_SAFE, acknowledging, operate_view
from tests.dashboard.feeds import WARNING, ended, feed

OPERATOR = Person("Night watch", "operator")
WATCHER = Person("Day watch", "watcher")


def offered(content: dict[str, object], person: Person = OPERATOR, silent: bool = False) -> list[str]:
    return [act["what"] for act in operate_view(content, silent, person, [])["acts"]]


@pytest.mark.parametrize(
    ("state", "acts"),
    [
        ("moving", ["hold", "end-after-lap", "park", "mute"]),
        ("counting", ["hold", "end-after-lap", "park", "mute"]),
        ("holding", ["resume", "park", "mute"]),
        ("parking", []),
        ("ready", []),
    ],
)
def test_only_what_a_state_allows_is_offered(state: str, acts: list[str]) -> None:
    assert offered(feed(state=state)) == acts


@pytest.mark.parametrize("person", [WATCHER, NOBODY])
def test_whoever_is_no_operator_is_offered_nothing(person: Person) -> None:
    assert offered(feed(), person) == []
    assert acknowledging(feed(), person, WARNING) is None


def test_nothing_is_offered_of_a_run_that_ended_or_is_silent() -> None:
    assert offered(ended()) == []
    assert offered(feed(), silent=True) == []
    assert acknowledging(ended(), OPERATOR, WARNING) is None


def test_every_act_that_moves_or_stops_something_says_that_it_is_no_safety_function() -> None:
    acts = operate_view(feed(), False, OPERATOR, [])["acts"]

    assert {act["what"] for act in acts if NOT_SAFE in act["will"]} == {"hold", "end-after-lap", "park"}
    assert all(act["run"] == feed()["run"] for act in acts)


def test_an_end_says_how_much_is_counted() -> None:
    (end,) = (act for act in operate_view(feed(), False, OPERATOR, [])["acts"] if act["what"] == "park")

    assert "12 of 19 pairs are counted by now." in end["will"]


def test_a_warning_is_taken_note_of_once() -> None:
    button = acknowledging(feed(), OPERATOR, WARNING)
    noted = acknowledging(feed(), OPERATOR, WARNING | {"acknowledged": {"by": "x", "utc": "now"}})

    assert button is not None
    assert (button["what"], button["about"]) == ("acknowledge", "level")
    assert noted is None


def test_requests_are_told_newest_first_with_what_became_of_them() -> None:
    requests: list[dict[str, Any]] = [
        {"what": "hold", "who": "Kim", "utc": "2026-12-01T03:10:00+00:00", "outcome": "heard at 03:10:20"},
        {"what": "resume", "who": "Night watch", "utc": "2026-12-01T03:12:00+00:00", "outcome": None},
    ]

    lines = operate_view(feed(), False, OPERATOR, requests)["asked"]

    assert lines == [
        "Resume: asked by Night watch at 03:12 UTC, not heard yet.",
        "Hold: asked by Kim at 03:10 UTC, heard at 03:10:20.",
    ]


def test_every_act_has_a_label_and_says_what_will_happen() -> None:
    assert all(act.label and act.will.endswith((".", "}")) for act in ACTS.values())


def test_a_hold_that_only_the_bench_clears_offers_no_resume_and_says_so() -> None:
    held = {"cause": "interlock", "why": "The pressure is out of band.", "since_utc": "x", "at_bench": True}

    said = operate_view(feed(state="holding", holding=held), False, OPERATOR, [])

    assert [act["what"] for act in said["acts"]] == ["park", "mute"]
    assert "cleared at the bench only" in said["says"]


def test_muting_says_for_how_long_and_asks_for_that_long() -> None:
    (mute,) = (act for act in operate_view(feed(), False, OPERATOR, [])["acts"] if act["what"] == "mute")

    assert "next 8 hours" in mute["will"]
    assert mute["about"] == "480"
