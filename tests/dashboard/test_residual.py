"""What the page says of kappa: figure, bands, zero, goal, and nothing while blinded."""

from __future__ import annotations

import json
from typing import Any

import pytest

from daq.estimate import anytime_multiplier
from dashboard.bands import INNER, OUTER, band_to_read, first_band_pair
from dashboard.figures import night, pattern, plates, strip
from dashboard.news import news
from dashboard.residual import residual_view, unit
from dashboard.view import view
from tests.dashboard import feeds
from tests.dashboard.feeds import ended, feed

EXACT = {
    "value": -0.72e-4,
    "se": 1.2345e-4,
    "counting_se": 1.17e-4,
    "interval_95": [-3.44e-4, 2.0e-4],
    "whole_night_95": [-5.39e-4, 3.95e-4],
    "pairs": 12,
    "planned_pairs": 19,
    "excess": 1.0551,
    "excess_se": 0.21,
    "goal_se": 1e-4,
    "forecast_se": 0.98e-4,
    "printable": True,
}


def said(**changed: Any) -> dict[str, Any]:
    return residual_view(feed(kappa=EXACT | changed))


def sentences(**changed: Any) -> str:
    return " ".join(said(**changed)["says"]).replace("\u00a0", " ")


def test_the_figure_carries_two_digits_of_its_error_bar() -> None:
    shown = said()

    assert (shown["figure"], shown["se"]) == ("−0.7", "1.2")
    assert shown["unit"] == "ten-thousandths (10⁻⁴) ± one standard error, after 12 of 19 pairs"


@pytest.mark.parametrize(
    ("slits", "heading"),
    [
        (2, "Second-order term"),
        (3, "Third-order residual"),
        (4, "Fourth-order residual"),
        (5, "Fifth-order residual"),
    ],
)
def test_the_order_follows_the_number_of_slits(slits: int, heading: str) -> None:
    assert residual_view(feed(slits=slits))["heading"] == f"{heading}, κ"


def test_the_unit_stays_that_of_the_goal_all_night() -> None:
    units = {unit(EXACT | {"se": se, "forecast_se": 1.4e-4})[1] for se in (9e-4, 3e-4, 1e-4)}

    assert units == {"ten-thousandths (10⁻⁴)"}


def test_a_goal_far_from_what_the_run_can_do_does_not_choose_the_unit() -> None:
    assert unit(EXACT | {"goal_se": 1e-4, "forecast_se": 2e-3})[1] == "thousandths (10⁻³)"


def test_both_bands_carry_their_own_words() -> None:
    outer, inner = said()["bands"]

    assert (outer["label"], outer["ends"]) == (OUTER, "−5.4 … +3.9")
    assert (inner["label"], inner["ends"]) == (INNER, "−3.4 … +2.0")
    assert OUTER == "95 % over the whole night, whatever you do"
    assert INNER == "95 % only if read once, at the planned end"


def test_the_ruler_has_zero_in_the_middle_and_holds_every_band() -> None:
    outer, inner = said()["bands"]

    assert (
        0
        < outer["from_percent"]
        < inner["from_percent"]
        < 50
        < inner["to_percent"]
        < outer["to_percent"]
        < 100
    )


@pytest.mark.parametrize(
    ("content", "band"), [(feed(), "outer"), (ended(), "inner"), (ended(complete=False), "outer")]
)
def test_only_the_planned_end_lets_the_inner_band_be_read(content: dict[str, Any], band: str) -> None:
    shown = residual_view(content)

    assert band_to_read(content) == band
    assert [entry["kind"] for entry in shown["bands"] if entry["read"]] == [band]
    assert shown["bands"][0]["kind"] == band


@pytest.mark.parametrize(
    ("whole", "sentence"),
    [
        ([-5e-4, 4e-4], "Zero lies inside the whole-night band."),
        ([1e-5, 4e-4], "Zero lies outside the whole-night band. Look for a cause in the instrument first."),
        ([-4e-4, -1e-5], "Zero lies outside the whole-night band. Look for a cause in the instrument first."),
    ],
)
def test_zero_is_judged_by_the_whole_night_band_alone(whole: list[float], sentence: str) -> None:
    assert said(interval_95=[2e-5, 3e-5], whole_night_95=whole)["says"][0] == sentence


def test_at_the_planned_end_zero_is_judged_by_the_interval() -> None:
    content = ended()
    content["kappa"] |= {"interval_95": [1e-5, 2e-4], "whole_night_95": [-1e-4, 3e-4]}

    assert residual_view(content)["says"][0].startswith(
        "Zero lies outside the 95 % interval at the planned end."
    )


def test_two_slits_are_not_asked_to_vanish() -> None:
    assert "not expected to vanish" in residual_view(feed(slits=2))["says"][0]


@pytest.mark.parametrize(
    ("forecast", "sentence"),
    [
        (0.98e-4, "At this pace the run ends with ± 1.0 and meets its goal of ± 1.0."),
        (
            1.1e-4,
            "At this pace the run ends with ± 1.1, just short of the goal of ± 1.0; "
            "the goal would take about 23 pairs instead of 19.",
        ),
        (
            2e-4,
            "At this pace the run ends with ± 2.0, short of the goal of ± 1.0; "
            "the goal would take about 76 pairs instead of 19.",
        ),
    ],
)
def test_the_goal_is_judged_by_the_forecast(forecast: float, sentence: str) -> None:
    assert sentence in sentences(forecast_se=forecast)


def test_without_a_goal_nothing_is_said_of_one() -> None:
    assert "goal" not in sentences(goal_se=None)


@pytest.mark.parametrize(("se", "word"), [(0.9e-4, "meets"), (1.3e-4, "misses")])
def test_after_the_end_the_goal_was_met_or_missed(se: float, word: str) -> None:
    content = ended()
    content["kappa"] |= {"se": se}

    assert f"that {word} the goal" in " ".join(residual_view(content)["says"])


def test_scatter_is_compared_with_counting() -> None:
    assert "Counting alone would give ± 1.2; the pairs scatter 1.1 ± 0.2 times as much." in sentences()


def test_a_rehearsal_says_what_its_source_was_given() -> None:
    shown = residual_view(feed(kappa=EXACT, truth_kappa=2.5e-4))["says"]

    assert shown[-1] == "The simulated source was given κ = +2.5 ten-thousandths."


@pytest.mark.parametrize("pairs", [2, 5, 6, 7])
def test_before_pair_eight_no_error_bar_is_printed(pairs: int) -> None:
    shown = residual_view(feed(pairs=pairs))

    assert (shown["figure"], shown["se"], shown["short"], shown["bands"]) == (None, None, "Too early", [])
    assert "The error bar gets a number at pair 8." in shown["says"]


def test_at_pair_eight_the_error_bar_is_printed() -> None:
    shown = residual_view(feed(pairs=8))

    assert shown["figure"] is not None
    assert shown["se"] is not None


@pytest.mark.parametrize("pairs", [0, 1])
def test_below_two_pairs_there_is_no_kappa(pairs: int) -> None:
    shown = residual_view(feed(pairs=pairs))

    assert (shown["figure"], shown["short"]) == (None, "Not yet")


def test_a_weak_interference_prints_no_ratio() -> None:
    shown = said(printable=False)

    assert (shown["figure"], shown["bands"]) == (None, [])
    assert "too weak to divide by" in shown["says"][0]


@pytest.mark.parametrize(("planned", "first"), [(12, 6), (20, 6), (40, 8), (200, 14)])
def test_the_band_starts_at_the_first_finite_pair_from_the_sixth(planned: int, first: int) -> None:
    """First finite pairs: for 20, 40 and 200 pairs planned the table of the t mixture has 6, 8 and 14."""
    assert first_band_pair(planned) == first
    assert anytime_multiplier(first, planned) < float("inf")


@pytest.mark.parametrize(("pairs", "there"), [(4, True), (5, True), (6, False)])
def test_the_start_of_the_band_is_announced_until_it_is_there(pairs: int, there: bool) -> None:
    assert ("The band starts at pair 6." in residual_view(feed(pairs=pairs))["says"]) is there


@pytest.mark.parametrize("blinding", ["frozen", "blinded", None, "OPEN", ""])
@pytest.mark.parametrize("chosen", [0, 3, 7])
def test_a_blinded_run_gives_nothing_of_kappa_away(blinding: str | None, chosen: int) -> None:
    content = feed(blinding=blinding, truth_kappa=0.123456)
    kappa, history = content["kappa"], content["history"]

    shown = (
        view(content, silent=False),
        night(content),
        pattern(content, chosen),
        plates(content),
        strip(content),
    )

    text = json.dumps(shown)
    figure = f"{kappa['value'] * 1e4:+.1f}".replace("-", "−")
    assert figure not in text
    assert OUTER not in text
    assert "0.123" not in text
    assert all(f"{value * 1e4:.4g}" not in text for value in history["kappa"])
    assert not {"predicted", "leftover", "leftover_se"} & set(shown[2])
    assert shown[3]["7"] == []


def test_a_blinded_run_hides_the_pattern_of_the_fullest_opening() -> None:
    assert "measured" not in pattern(feed(blinding="frozen"), 7)
    assert "measured" in pattern(feed(blinding="frozen"), 3)


def test_a_blinded_run_shows_its_count_rate_only_relative_to_itself() -> None:
    shown = strip(feed(blinding="frozen"))

    assert shown["unit"] == "percent of the mean so far"
    assert sum(shown["mean"]) / len(shown["mean"]) == pytest.approx(100, abs=1e-2)


def test_a_blinded_run_still_shows_its_error_bar() -> None:
    shown = residual_view(feed(kappa=EXACT, blinding="frozen"))

    assert (shown["short"], shown["figure"], shown["se"]) == ("Hidden", None, "1.2")


def test_no_part_of_the_answer_to_a_browser_holds_the_hidden_kappa(tmp_path: Any) -> None:
    content = feed(blinding="frozen")
    feeds.put(tmp_path, content)

    answer = news(tmp_path, None, None, {}, feeds.START)

    assert f"{content['kappa']['value'] * 1e4:+.1f}".replace("-", "−") not in str(answer)
