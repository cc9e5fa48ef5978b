"""At the bench: what only a person may do is asked for with its caution, and waited for."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from daq.description.by_hand import Dial
from daq.errors import DaqError
from daq.service.at_bench import turned
from daq.tasks.contract import Turn
from daq.tasks.turns import set_detector

BIAS = set_detector(Dial(now=1000, low=900, high=1100), 950)


def done_by(*lines: str) -> tuple[Turn, list[str]]:
    """Return a turn that somebody made who typed these lines, and what they were told."""
    typed: Iterator[str] = iter((*lines, ""))
    told: list[str] = []
    return turned(lambda question: next(typed), told.append, BIAS), told


def test_the_caution_comes_before_the_turn_and_enter_says_that_it_is_done() -> None:
    turn, told = done_by("\n")

    assert turn == BIAS
    assert told[0].startswith("CAUTION: high voltage")
    assert told[0].endswith("Set the detector's bias to 950 V.")


def test_what_the_instrument_shows_may_be_typed_and_must_be_a_number() -> None:
    turn, told = done_by("nine hundred\n", "nan\n", "948.5\n")

    assert (turn.value, turn.shown) == (950, 948.5)
    assert told[1:] == ["'nine hundred' is no number.", "'nan' is no number."]


def test_a_turn_that_nobody_makes_ends_the_task() -> None:
    with pytest.raises(DaqError, match=r"nobody has done it\. Set back what was turned"):
        done_by()
