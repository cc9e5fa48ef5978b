from daq.service.room import room_warning, shortage
from daq.storage.space import free_bytes


def test_a_disk_with_room_is_no_news(tmp_path):
    assert shortage(tmp_path, hold_bytes=1) == ""


def test_a_disk_below_the_limit_is_told_with_its_figure(tmp_path):
    assert "GB are free on the disk; the run holds below" in shortage(
        tmp_path, hold_bytes=2 * free_bytes(tmp_path)
    )


def test_a_night_that_does_not_fit_is_told_before_it_begins(tmp_path):
    visits_too_many = free_bytes(tmp_path) // 100

    assert "the whole night may want" in room_warning(tmp_path, visits_too_many)
