from datetime import UTC, date, datetime, time, timedelta
from itertools import islice, pairwise
from zoneinfo import ZoneInfo

import pytest

from daq.service.calendar import Times, missed, starts

BERLIN = ZoneInfo("Europe/Berlin")


def times(days=("daily",), at=time(18, 30), first_day=date(2026, 12, 1), late_s=3600.0, zone=BERLIN):
    return Times(days, at, zone, first_day, late_s)


def utc(year, month, day, hour=0, minute=0):
    return datetime(year, month, day, hour, minute, tzinfo=UTC)


def test_a_single_booking_starts_once_at_its_local_time():
    assert list(starts(times(("once",)), utc(2026, 11, 1))) == [utc(2026, 12, 1, 17, 30)]


def test_a_single_booking_that_is_over_never_starts():
    assert list(starts(times(("once",)), utc(2026, 12, 2))) == []


def test_weekdays_are_named_and_met():
    found = list(islice(starts(times(("mon", "fri")), utc(2026, 12, 1)), 4))

    assert [day.strftime("%a") for day in found] == ["Fri", "Mon", "Fri", "Mon"]


# Clock changes of Europe/Berlin in 2026: 29 March 02:00 -> 03:00 and 25 October 03:00 -> 02:00 local time
# (Directive 2000/84/EC of the European Parliament and of the Council, articles 2 and 3: last Sundays of March
# and October at 01:00 UTC; articles from memory).
@pytest.mark.parametrize("at", [time(1, 30), time(2, 30), time(3, 30)])
@pytest.mark.parametrize("change", [date(2026, 3, 29), date(2026, 10, 25)])
def test_on_a_clock_change_night_a_run_starts_once(change, at):
    days = [change + timedelta(days=offset) for offset in (-1, 0, 1)]

    found = list(islice(starts(times(at=at, first_day=days[0]), utc(2026, 1, 1)), 3))

    assert [one.astimezone(BERLIN).date() for one in found] == days
    assert all(
        timedelta(hours=23) <= later - sooner <= timedelta(hours=25) for sooner, later in pairwise(found)
    )


def test_a_time_that_comes_twice_is_taken_the_first_time():
    assert times(at=time(2, 30)).on(date(2026, 10, 25)) == utc(2026, 10, 25, 0, 30)


def test_a_time_that_is_skipped_is_taken_an_hour_later_on_the_clock():
    start = times(at=time(2, 30)).on(date(2026, 3, 29))

    assert start == utc(2026, 3, 29, 1, 30)
    assert start.astimezone(BERLIN).time() == time(3, 30)


def test_a_start_may_be_late_by_so_much_and_no_more():
    due = utc(2026, 12, 1, 17, 30)

    assert not missed(times(), due, due + timedelta(hours=1))
    assert missed(times(), due, due + timedelta(hours=1, seconds=1))
