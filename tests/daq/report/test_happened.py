"""What happened: a sentence that comes again is told once, and a long night fits the page."""

from __future__ import annotations

from typing import Any

from daq.report.happened import MOST, happened, marks_h


def entry(event: str, second: int, text: str = "") -> dict[str, Any]:
    utc = f"2026-12-01T17:{second // 60:02d}:{second % 60:02d}Z"
    return {"event": event, "utc": utc, "run_ns": 1 + second, **({"text": text} if text else {})}


def test_what_comes_again_is_told_once_with_how_often_and_until_when() -> None:
    faults = [entry("fault", second, "No reply.") for second in range(0, 600, 20)]
    log = [*faults, entry("ready", 610, "After 10 min without a count: all is well.")]

    assert happened(log) == [
        {"utc": "2026-12-01T17:00:00Z", "text": "No reply. (30 times, until 17:09:40)"},
        {"utc": "2026-12-01T17:10:10Z", "text": "After 10 min without a count: all is well."},
    ]


def test_holds_are_told_and_what_is_of_no_use_in_the_morning_is_not() -> None:
    log = [entry("holding", 1, "The room is too warm."), entry("resume asked", 2), entry("visit", 3)]

    assert [one["text"] for one in happened(log)] == ["The room is too warm."]


def test_a_long_list_ends_in_how_many_more() -> None:
    log = [entry("fault", second, f"Fault {second}.") for second in range(30)]

    told = happened(log)

    assert len(told) == MOST
    assert told[-1]["text"] == f"and {30 - MOST + 1} more from here on, see `tercet log`"


def test_marks_are_hours_since_the_log_began() -> None:
    assert marks_h([entry("run begins", 0), entry("fault", 1800), entry("ended", 3599)]) == [0.5]
