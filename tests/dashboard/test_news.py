"""What travels to a browser: only what changed, little of it, and never more for a longer run."""

from __future__ import annotations

import gzip
from collections.abc import Mapping
from datetime import timedelta
from pathlib import Path
from typing import Any

import pytest
from dash.exceptions import PreventUpdate
from plotly.utils import PlotlyJSONEncoder

from daq.estimate.running import HISTORY_POINTS
from daq.service.strip import COLUMNS
from dashboard.news import news
from tests.dashboard.feeds import START, feed, put


def weight(answer: Mapping[str, Any]) -> int:
    """Return the gzipped bytes of an answer as Dash writes it."""
    return len(gzip.compress(PlotlyJSONEncoder().encode(answer).encode(), 6))


def samples(content: Any) -> int:
    """Return how many numbers a feed holds."""
    if isinstance(content, Mapping):
        return sum(samples(value) for value in content.values())
    if isinstance(content, list):
        return sum(samples(value) for value in content)
    return isinstance(content, (int, float))


def words(component: Mapping[str, Any]) -> Any:
    """Return what a component holds, as it travels."""
    return component["props"]["children"]


def full(**changed: Any) -> dict[str, Any]:
    """Return a feed whose bounded parts are full, at 201 positions."""
    return feed(pairs=HISTORY_POINTS, planned=600, positions=201, columns=COLUMNS, **changed)


def test_the_first_answer_holds_every_part(tmp_path: Path) -> None:
    put(tmp_path, feed())

    answer = news(tmp_path, None, None, {}, START)

    assert {"verdict", "kappa", "rail", "night-data", "pattern-data", "strip-data", "seen"} <= set(answer)


def test_nothing_new_is_no_answer(tmp_path: Path) -> None:
    put(tmp_path, feed())
    seen = news(tmp_path, None, None, {}, START)["seen"]

    with pytest.raises(PreventUpdate):
        news(tmp_path, None, None, seen, START)


def test_only_what_changed_travels(tmp_path: Path) -> None:
    content = feed()
    put(tmp_path, content)
    seen = news(tmp_path, None, None, {}, START)["seen"]
    content["visit"]["number"] += 1
    put(tmp_path, content)

    answer = news(tmp_path, None, None, seen, START)

    assert set(answer) == {"line", "seen"}


def test_choosing_an_opening_sends_its_pattern_alone(tmp_path: Path) -> None:
    put(tmp_path, feed())
    seen = news(tmp_path, None, None, {}, START)["seen"]

    answer = news(tmp_path, None, 3, seen, START)

    assert set(answer) == {"pattern-data", "seen"}
    assert answer["pattern-data"]["name"] == "AB"


@pytest.mark.parametrize("chosen", [8, -1, 10**9])
def test_an_opening_that_the_run_does_not_have_shows_the_fullest(tmp_path: Path, chosen: int) -> None:
    put(tmp_path, feed())

    assert news(tmp_path, None, chosen, {}, START)["pattern-data"]["name"] == "ABC"


def test_silence_is_news(tmp_path: Path) -> None:
    put(tmp_path, feed(written_utc=START.isoformat()))
    seen = news(tmp_path, None, None, {}, START + timedelta(seconds=29))["seen"]

    answer = news(tmp_path, None, None, seen, START + timedelta(seconds=31))

    assert "verdict" in answer


def test_the_run_written_last_is_shown_whatever_its_name(tmp_path: Path) -> None:
    put(tmp_path, feed(run="20270101T000000Z-later-by-name", title="first"))
    put(tmp_path, feed(run="20200101T000000Z-earlier-by-name", title="second"))

    answer = news(tmp_path, None, None, {}, START)

    assert words(answer["header"][0]) == "second"


@pytest.mark.parametrize("text", ["", "{", "[]", "null", '{"format": 2}', '{"format": 1}'])
def test_a_feed_that_cannot_be_read_is_said(tmp_path: Path, text: str) -> None:
    (put(tmp_path, feed()) / "live.json").write_text(text)

    answer = news(tmp_path, None, None, {}, START)

    assert words(answer["verdict"][1]["props"]["children"][0]) == "This run cannot be read."


def test_a_run_without_a_feed_is_waited_for(tmp_path: Path) -> None:
    (tmp_path / "runs" / "20261201T201500Z-lantern").mkdir(parents=True)

    answer = news(tmp_path, "20261201T201500Z-lantern", None, {}, START)

    assert words(answer["verdict"][1]["props"]["children"][0]) == "Nothing heard of this run yet."


@pytest.mark.parametrize("slits", [3, 5])
def test_a_refresh_in_the_midst_of_a_pair_weighs_at_most_six_kilobytes(tmp_path: Path, slits: int) -> None:
    """At 201 positions: one visit further, rates and leftover new."""
    put(tmp_path, full(slits=slits))
    seen = news(tmp_path, None, None, {}, START)["seen"]
    later = full(slits=slits)
    other = full(slits=slits, seed=8)
    later |= {key: other[key] for key in ("rates_hz", "epsilon_hz")}
    later["visit"]["number"] += 1
    put(tmp_path, later)

    answer = news(tmp_path, None, None, seen, START)

    assert {"line", "pattern-data", "plates-data"} <= set(answer)
    assert weight(answer) <= 6_000


@pytest.mark.parametrize("slits", [3, 5])
def test_a_refresh_of_everything_weighs_at_most_twelve_kilobytes(tmp_path: Path, slits: int) -> None:
    put(tmp_path, full(slits=slits))

    answer = news(tmp_path, None, None, {}, START)

    assert weight({name: part for name, part in answer.items() if name.endswith("-data")}) <= 12_000


def test_a_run_of_a_million_visits_weighs_hardly_more_than_one_of_a_thousand(tmp_path: Path) -> None:
    """125 stands and 12 pairs at 41 positions, beside a history and a strip that are full."""
    weights = []
    for pairs, columns in ((12, min(125, COLUMNS)), (HISTORY_POINTS, COLUMNS)):
        put(tmp_path, feed(pairs=pairs, planned=600, columns=columns))
        weights.append(weight(news(tmp_path, None, None, {}, START)))

    assert weights[1] <= 1.2 * weights[0]


def test_history_and_strip_hold_at_most_four_thousand_samples() -> None:
    content = full()

    assert samples(content["history"]) + samples(content["rate"]) <= 4_000
