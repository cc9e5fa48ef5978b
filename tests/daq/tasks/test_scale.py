"""Scale: the scale that all fringes share, and what is said when they do not share it."""

from __future__ import annotations

from typing import Any

import numpy as np

from daq.tasks.contract import Ask, Outcome, Taken
from daq.tasks.scale import TASK
from tests.daq.tasks.made import pair_counts, reading, setting

EXPECTED_MM = {"AB": 5.32, "BC": 5.32, "AC": 2.66}


def done(bent_mm: float = 0.0, **periods_mm: float) -> Outcome:
    """Return the outcome on the Lantern bench, with fringes of other periods, on a stage that is bent."""
    known, random = setting(), np.random.default_rng(4)
    asks = TASK.asks(known, ())
    place = np.unique([ask.position_mm for ask in asks])
    true_mm = place + bent_mm * np.cos(2 * np.pi * place / np.ptp(place))
    rates: dict[str, Any] = pair_counts(
        0.95, 20_000.0, 16.0, none=400.0, place_mm=true_mm, periods_mm=EXPECTED_MM | periods_mm
    )

    def one(ask: Ask) -> Taken:
        at = int(np.searchsorted(place, ask.position_mm))
        return ask, reading(ask, (int(random.poisson(rates[ask.role][at])),))

    return TASK.fit(known, [one(ask) for ask in asks])


def test_a_scale_that_all_fringes_share_is_found_and_passes() -> None:
    found = done(**{pair: 1.002 * period for pair, period in EXPECTED_MM.items()})

    assert abs(found.values["scale"] - 1.002) < 4 * found.se["scale"] < 4e-3
    assert found.verdict == "pass"


def test_fringes_of_the_outer_slits_that_are_not_half_as_wide_are_doubtful_in_words() -> None:
    found = done(AC=2.66 * 1.003)

    assert found.verdict == "doubtful"
    assert "Fringes of the pairs do not agree" in found.sentence


def test_a_stage_whose_scale_is_bent_by_ten_micrometres_is_doubtful_in_words() -> None:
    found = done(bent_mm=0.01)

    # middles of the sections: away at the ends, back in the middle, what a shift and a scale leave of it
    ends, middles = np.array(found.values["bent_mm"])[[0, 3]], np.array(found.values["bent_mm"])[[1, 2]]
    assert (ends > 3e-3).all() and (middles < -1e-3).all()
    assert found.verdict == "doubtful"
    assert "The scale is not even over the range" in found.sentence


def test_an_even_stage_is_not_said_to_be_bent() -> None:
    found = done()

    assert found.verdict == "pass"
    assert "not even" not in found.sentence
