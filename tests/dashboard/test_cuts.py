"""Slits that were cut apart, as the page says it."""

from __future__ import annotations

import json
from typing import Any

import pytest

from dashboard.components import render
from dashboard.cuts import cuts_view
from tests.dashboard.feeds import feed

FOUND: dict[str, Any] = {
    "kappa_before": -2.01e-2,
    "kappa": -1.2e-4,
    "kappa_se": 2.1e-4,
    "counting_se": 1.8e-4,
    "geometry_se": 1.6e-4,
    "interval_95": [-6e-4, 3e-4],
    "joint_kappa": 4e-5,
    "joint_se": 9e-5,
    "joint_ratio": 1.02,
    "joint_fits": True,
    "differ": False,
    "visibility": {"AB": 1.0, "AC": 1.0, "BC": 1.0},
    "spectrum": {
        "distance_m": [0.0, 1.2e-7, 2.4e-7],
        "before": [2580.0, 38.0, 0.1],
        "after": [0.3, 1.0, 0.0],
        "lines": [
            {"name": "each slit", "distance_m": 0.0, "before": 2580.0, "after": 0.3},
            {"name": "A and B", "distance_m": 2.4e-7, "before": 38.6, "after": 5.04},
        ],
    },
}


def said(**changes: Any) -> dict[str, Any]:
    found = cuts_view(feed(geometry=FOUND | changes))
    assert found is not None
    return found


def test_the_residual_after_stands_before_the_one_before() -> None:
    names = [(one["name"], one["value"].split(" ± ")[0]) for one in said()["figures"]]

    assert [name for name, _ in names] == ["Accounted for", "Before", "All patterns together"]
    assert names[0][1] == "−1.2" and names[1][1] == "−201.0"


def test_the_lines_of_the_spectrum_are_given_as_figures_and_heights() -> None:
    found = said()

    assert found["lines"] == [
        {"name": "each slit", "before": "2580", "after": "0.3"},
        {"name": "A and B", "before": "39", "after": "5.0"},
    ]
    assert found["columns"][1][1] == pytest.approx(16.7)  # counting noise: a sixth of six decades
    assert found["columns"][2] == [0.0, 0.0] and found["columns"][0][0] < 100


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"joint_fits": False, "joint_kappa": None, "joint_se": None}, "something else acts"),
        ({"differ": True}, "differ by more than three"),
        ({}, "explain the patterns"),
    ],
)
def test_what_the_model_cannot_explain_is_said(changes: dict[str, Any], words: str) -> None:
    found = said(**changes)

    (sentence,) = found["says"]
    assert words in sentence and sentence.startswith("Look at this") == bool(changes)
    assert len(found["figures"]) == (2 if "joint_kappa" in changes else 3)


def test_a_young_a_blinded_and_a_shared_run_have_no_such_part() -> None:
    assert cuts_view(feed(pairs=7, geometry=FOUND)) is None
    assert cuts_view(feed(blinding="blinded", geometry=FOUND)) is None
    assert cuts_view(feed()) is None


def test_the_part_has_a_heading_a_drawing_and_a_table() -> None:
    drawn = json.dumps([one.to_plotly_json() for one in render("cuts", said())], default=vars)

    assert all(word in drawn for word in ("Slits cut apart", "columns", "Accounted for", "A and B", "2580"))
    assert render("cuts", None) == []
