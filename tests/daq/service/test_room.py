import pytest

from daq.itinerary import compose
from daq.service.room import events_due, room_warning, shortage, wanted_bytes
from daq.storage.space import EVENT_BYTES, free_bytes
from tests.examples import lantern, lantern_rig


def test_a_disk_with_room_is_no_news(tmp_path):
    assert shortage(tmp_path, hold_bytes=1) == ""


def test_a_disk_below_the_limit_is_told_with_its_figure(tmp_path):
    assert "GB are free on the disk; the run holds below" in shortage(
        tmp_path, hold_bytes=2 * free_bytes(tmp_path)
    )


def test_a_night_that_does_not_fit_is_told_before_it_begins(tmp_path):
    visits_too_many = free_bytes(tmp_path) // 100

    assert "the night may want" in room_warning(tmp_path, visits_too_many)


def test_the_events_of_a_night_in_list_mode_want_room_too(tmp_path):
    free = free_bytes(tmp_path)

    assert room_warning(tmp_path, 100) == ""
    assert "the night may want" in room_warning(tmp_path, 100, events=free / EVENT_BYTES)
    assert wanted_bytes(100, 1e9) - wanted_bytes(100) == 1e9 * EVENT_BYTES


def test_so_many_events_are_due_as_the_plan_expects_counts_in_every_channel():
    itinerary = compose(lantern(itinerary__laps=4), lantern_rig())
    openings = [itinerary.openings.tolist().index(one) for one in itinerary.opening]
    places = [itinerary.positions_mm.tolist().index(one) for one in itinerary.position_mm]
    counts = sum(
        dwell_s * itinerary.rates_hz[place, opening]
        for dwell_s, place, opening in zip(itinerary.dwell_s, places, openings, strict=True)
    )

    assert events_due(itinerary, {"channels": 3}) == pytest.approx(3 * counts)
    assert events_due(itinerary, None) == 0.0
