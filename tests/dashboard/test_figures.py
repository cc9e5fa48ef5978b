"""Curves of the page: what they hold, and the sentences that go with them."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest

from daq import openings
from dashboard.figures import night, pattern, plates, strip
from tests.dashboard.feeds import WARNING, ended, feed


@pytest.mark.parametrize("slits", [2, 3, 5])
@pytest.mark.parametrize("index", [0, 1, -1])
def test_the_prediction_of_an_opening_is_made_from_all_the_others(slits: int, index: int) -> None:
    """Solve the signed sum for one opening, without epsilon: the page's line lies on it (to 4 digits)."""
    content = feed(slits=slits)
    chosen = content["openings"][index]
    signs = {mask: openings.sign(openings.name(mask), slits) for mask in content["openings"]}
    rates = dict(zip(content["openings"], np.array(content["rates_hz"]), strict=True))
    others = sum(signs[mask] * rates[mask] for mask in rates if mask != chosen)

    shown = pattern(content, chosen)

    scale = 1000.0 if shown["unit"].startswith("thousand") else 1.0
    assert np.array(shown["predicted"]) * scale == pytest.approx(-others / signs[chosen], rel=6e-4, abs=0.01)


def test_what_is_left_over_is_measured_less_predicted() -> None:
    shown = pattern(feed(), 3)

    assert shown["leftover_unit"] == "counts per second"
    difference = (np.array(shown["measured"]) - np.array(shown["predicted"])) * 1000
    assert difference == pytest.approx(np.array(shown["leftover"]), abs=150)  # 4 digits of 2e5 are 1e2 apart


def test_the_pattern_s_sentence_says_where_it_is_highest_and_how_far_off() -> None:
    content = feed()
    errors = content["epsilon_se_hz"]
    content["epsilon_hz"] = [0.0] * 41
    content["epsilon_hz"][30] = 3.2 * errors[30]

    shown = pattern(content, 7)

    assert shown["alt"].startswith("Pattern of ABC: highest at 0.00 mm with ")
    assert "At 40 of 41 positions it is zero within that error" in shown["alt"]
    assert "the farthest 3.2 standard errors off, at +6.40 mm" in shown["alt"]


def test_a_great_leftover_is_drawn_in_thousands() -> None:
    content = feed(slits=2)

    shown = pattern(content, 3)

    assert shown["leftover_unit"] == "thousand counts per second"
    assert shown["leftover"][20] == pytest.approx(content["epsilon_hz"][20] / 1000, rel=6e-3)


def test_for_two_slits_the_leftover_is_called_the_interference() -> None:
    assert pattern(feed(slits=2), 3)["alt"].endswith("With two slits it is the interference itself.")


def test_an_opening_that_was_not_counted_says_so() -> None:
    content = feed()
    content["rates_hz"][3] = [None] * 41

    assert pattern(content, 3)["empty"] == "AB has not been counted yet."


def test_a_pattern_without_a_complete_stand_has_no_prediction() -> None:
    content = feed(epsilon_hz=[None] * 41, epsilon_se_hz=[None] * 41)

    assert "predicted" not in pattern(content, 3)


def test_plates_stand_in_one_scale_as_amplitudes() -> None:
    content = feed()
    shown = plates(content)

    rates = np.array(content["rates_hz"])
    assert shown["1"][20] == round(1000 * float(np.sqrt(rates[1, 20] / rates.max())))
    assert max(height or 0 for row in shown.values() for height in row) == 1000


def test_plates_stay_small_at_any_number_of_positions() -> None:
    shown = plates(feed(positions=201))

    assert {len(row) for row in shown.values()} == {51}


def test_the_night_holds_both_bands_from_their_first_pair() -> None:
    history = feed()["history"]

    shown = night(feed())

    assert [value is None for value in shown["whole"]] == [True] * 5 + [False] * 7
    assert shown["unit"] == "ten-thousandths (10⁻⁴)"
    fine = 1e-3 * shown["reach"]
    assert shown["kappa"] == pytest.approx([1e4 * v for v in history["kappa"]], abs=fine)
    low = [dot - half for dot, half in zip(shown["kappa"][5:], shown["whole"][5:], strict=True)]
    assert low == pytest.approx([1e4 * v for v in history["whole_low"][5:]], abs=2 * fine)
    assert shown["interval"][-1] * 2 == pytest.approx(
        1e4 * (history["interval_high"][-1] - history["interval_low"][-1]), abs=2 * fine
    )


def test_no_band_is_drawn_before_pair_six_even_where_it_is_finite() -> None:
    """With nine pairs planned the multiplier is finite from pair 4."""
    content = feed(pairs=9, planned=9)
    assert content["history"]["whole_low"][4] is not None

    shown = night(content)

    assert [value is None for value in shown["whole"]] == [True] * 5 + [False] * 4
    assert night(feed(pairs=5, planned=9))["alt"].endswith("No band yet.")


def test_no_forecast_is_drawn_before_there_is_a_band() -> None:
    assert night(feed(pairs=5))["forecast"] is None
    assert night(feed(pairs=6))["forecast"] is not None


def test_the_forecast_is_the_inner_bar_at_the_planned_end() -> None:
    """The t quantile for 18 degrees of freedom, 0.975: 2.101 (printed in any table of Student's t)."""
    content = feed()

    shown = night(content)["forecast"]

    assert shown["half"] == pytest.approx(2.101 * content["kappa"]["forecast_se"] * 1e4, abs=2e-3)
    assert shown["goal"] == pytest.approx(2.101, abs=1e-3)


def test_an_ended_run_has_no_forecast() -> None:
    shown = night(ended())

    assert (shown["forecast"], shown["end"]) == (None, None)


def test_the_axis_holds_every_dot() -> None:
    shown = night(feed())

    assert shown["reach"] >= max(abs(value) for value in shown["kappa"])


def test_the_night_s_sentence_says_the_whole_night_band() -> None:
    content = feed()
    content["kappa"] |= {"value": -0.72e-4, "whole_night_95": [-5.39e-4, 3.95e-4]}

    assert night(content)["alt"] == (
        "κ after 12 pairs: −0.7 ten-thousandths (10⁻⁴). The whole-night band reaches from −5.4 to +3.9."
    )


def test_before_the_first_pair_the_night_is_empty() -> None:
    assert night(feed(pairs=0))["empty"] == "The first dot appears when the first pair is complete."


def test_a_dip_of_one_sample_is_kept_to_the_digit() -> None:
    shown = strip(feed())

    assert min(shown["low"]) == 29.6
    assert "least 29.6" in shown["alt"]


def test_the_stretch_a_warning_speaks_of_is_tinted() -> None:
    assert strip(feed(warnings=[WARNING]))["tinted"] == [3.95]
    assert strip(feed())["tinted"] == []


@pytest.mark.parametrize("content", [feed(), feed(pairs=0), feed(blinding="frozen"), ended(), feed(slits=5)])
def test_curves_are_plain_data(content: dict[str, Any]) -> None:
    made = [night(content), pattern(content, 3), plates(content), strip(content)]

    assert json.loads(json.dumps(made, allow_nan=False)) == made


def test_a_night_whose_kappa_cannot_be_worked_out_says_so() -> None:
    content = feed()
    content["kappa"]["value"] = None

    drawn = night(content)

    assert drawn["empty"] == "κ cannot be worked out from what is counted so far."
