"""Where the error comes from, as the page says it."""

from __future__ import annotations

from dashboard.budget import budget_view
from dashboard.words import NB
from tests.dashboard.feeds import feed


def test_the_largest_line_comes_first_and_says_what_would_make_it_smaller() -> None:
    said = budget_view(feed())

    assert said is not None
    assert [(line["name"], line["value"], line["percent"]) for line in said["lines"]] == [
        ("counting", f"±{NB}1.1", 95.5),
        ("the source", f"±{NB}0.31", 28.2),
    ]
    assert said["says"][-1].startswith("To make it smaller: Four times the counts")


def test_what_is_contained_in_another_line_is_not_told_twice() -> None:
    said = budget_view(feed())

    assert said is not None
    assert "background" not in str(said)


def test_small_lines_are_told_together() -> None:
    said = budget_view(feed())

    assert said is not None
    assert said["says"][0] == "Below a twentieth of the whole: dead time; slow drift and missing visits."


def test_a_young_or_blinded_run_has_no_budget_on_the_page() -> None:
    assert budget_view(feed(pairs=7)) is None
    assert budget_view(feed(blinding="blinded")) is None
    assert budget_view(feed(budget=None)) is None
