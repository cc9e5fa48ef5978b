import numpy as np
import pytest
import xarray as xr

from daq.itinerary import compose
from daq.service.groups import AFTER_BREAK, AFTER_FAULT, Place, place_after, repeat_from, supply
from tests.examples import lantern, lantern_rig


@pytest.fixture(scope="module")
def itinerary():
    return compose(lantern(itinerary__laps=2, positions__number=3), lantern_rig())


def rows(visits, attempts):
    return xr.Dataset({"visit": ("row", np.array(visits)), "attempt": ("row", np.array(attempts))})


def test_a_run_without_a_reading_begins_at_the_beginning(itinerary):
    assert place_after(itinerary, rows([], [])) == Place(0)


def test_an_interrupted_stand_is_repeated_whole(itinerary):
    place = place_after(itinerary, rows(range(11), [1] * 11))

    assert place == Place(8, 2, AFTER_BREAK)


def test_an_attempt_that_was_interrupted_again_is_repeated_once_more(itinerary):
    place = place_after(itinerary, rows([*range(11), 8, 9], [1] * 11 + [2, 2]))

    assert place == Place(8, 3, AFTER_BREAK)


def test_after_a_whole_stand_the_next_one_comes(itinerary):
    assert place_after(itinerary, rows(range(16), [1] * 16)) == Place(16)


def test_unplanned_visits_do_not_move_the_place(itinerary):
    assert place_after(itinerary, rows([0, 1, -1], [1, 1, 1])) == Place(0, 2, AFTER_BREAK)


def test_a_whole_run_has_nothing_left(itinerary):
    place = place_after(itinerary, rows(range(48), [1] * 48))

    assert list(supply(itinerary, place, lambda number: True)) == []


def test_a_repeated_stand_goes_in_the_same_direction_and_is_followed_by_first_attempts(itinerary):
    place = repeat_from(itinerary, 11, 1, AFTER_FAULT)

    supplied = list(supply(itinerary, place, lambda number: True))

    assert [visit.number for visit, _, _ in supplied] == list(range(8, 48))
    assert [attempt for _, attempt, _ in supplied] == [2] * 8 + [1] * 32
    assert [reason for _, _, reason in supplied] == [AFTER_FAULT] * 8 + [0] * 32


def test_whoever_ends_a_run_is_asked_before_each_stand_only(itinerary):
    asked: list[int] = []

    def may_go_on(number):
        asked.append(number)
        return len(asked) < 3

    supplied = list(supply(itinerary, Place(0), may_go_on))

    assert len(supplied) == 16
    assert asked == [0, 8, 16]


def test_in_blocked_order_a_broken_run_goes_on_at_the_next_visit():
    blocked = compose(
        lantern(itinerary__laps=2, positions__number=3, itinerary__order="blocked"), lantern_rig()
    )

    assert place_after(blocked, rows(range(11), [1] * 11)) == Place(11)
