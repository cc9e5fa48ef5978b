from __future__ import annotations

from collections.abc import Sequence
from random import Random

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq.estimate import use
from daq.records import Quality


def used(rows: Sequence[tuple[int, int, int, int]], openings_per_stand: int = 2) -> list[bool]:
    """Return the rule's verdict for rows of (stand, attempt, opening, quality)."""
    stand, attempt, opening, quality = (np.array(column, np.int64) for column in zip(*rows, strict=True))
    return [bool(verdict) for verdict in use(stand, attempt, opening, quality, openings_per_stand)]


def test_a_whole_good_stand_is_used() -> None:
    assert used([(0, 1, 0, Quality.GOOD), (0, 1, 1, Quality.GATE_TIME)]) == [True, True]


def test_one_excluding_bit_leaves_the_whole_stand_out() -> None:
    assert used([(0, 1, 0, Quality.GOOD), (0, 1, 1, Quality.OVERFLOW)]) == [False, False]


def test_the_latest_good_whole_attempt_is_used() -> None:
    rows = [
        (0, 1, 0, Quality.GOOD), (0, 1, 1, Quality.GOOD),
        (0, 2, 0, Quality.GOOD), (0, 2, 1, Quality.GOOD),
        (0, 3, 0, Quality.MOVED), (0, 3, 1, Quality.GOOD),
        (0, 4, 0, Quality.GOOD),
    ]  # fmt: skip

    assert used(rows) == [False, False, True, True, False, False, False]


def test_an_interrupted_stand_is_not_used() -> None:
    assert used([(0, 1, 0, Quality.GOOD), (1, 1, 0, Quality.GOOD), (1, 1, 1, Quality.GOOD)]) == [
        False,
        True,
        True,
    ]


def test_an_opening_counted_twice_does_not_stand_in_for_a_missing_one() -> None:
    assert used([(0, 1, 0, Quality.GOOD), (0, 1, 0, Quality.GOOD)]) == [False, False]


def test_unplanned_visits_are_never_used() -> None:
    assert used([(-1, 1, 0, Quality.GOOD), (-1, 1, 1, Quality.GOOD)]) == [False, False]


def test_no_rows_give_no_verdicts() -> None:
    empty = np.zeros(0, np.int64)

    assert use(empty, empty, empty, empty, 8).tolist() == []


ROW = st.tuples(st.integers(-1, 3), st.integers(1, 3), st.integers(0, 1), st.sampled_from([0, 2, 32]))


@given(st.lists(ROW, min_size=1, max_size=40), st.randoms(use_true_random=False))
def test_the_order_of_the_rows_does_not_matter(
    rows: list[tuple[int, int, int, int]], shuffler: Random
) -> None:
    order = list(range(len(rows)))
    shuffler.shuffle(order)

    shuffled = used([rows[at] for at in order])

    straight = used(rows)
    assert shuffled == [straight[at] for at in order]


@pytest.mark.parametrize("bit", [bit for bit in Quality if bit])
def test_every_quality_bit_either_excludes_or_not_and_the_table_says_which(bit: Quality) -> None:
    excluding = {"OVERFLOW", "OFF_TARGET", "MOVED", "DISPERSION", "SENSOR"}
    excluding |= {"NO_COUNTS", "FINGERPRINT", "DARK", "FLANK"}

    assert used([(0, 1, 0, bit), (0, 1, 1, Quality.GOOD)]) == [bit.name not in excluding] * 2
