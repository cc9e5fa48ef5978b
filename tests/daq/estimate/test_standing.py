"""Warnings are raised once, updated, cleared and acknowledged."""

from dataclasses import replace

from daq.estimate.standing import acknowledge, look_again
from daq.estimate.watch import Concern

LEVEL = Concern("level", "The count rate fell by 5.0 %.", "Nothing now.", "kappa is still good.")


def test_a_warning_is_raised_once_and_updated_without_news():
    raised: dict[str, int] = {}
    first, news = look_again((), [LEVEL], raised, "22:00")
    second, no_news = look_again(first, [replace(LEVEL, what="fell by 6.0 %")], raised, "23:00")

    assert [change.became for change in news] == ["raised"]
    assert no_news == ()
    assert (second[0].name, second[0].since_utc, second[0].updated_utc) == ("level-1", "22:00", "23:00")
    assert second[0].says.what == "fell by 6.0 %"


def test_a_warning_that_is_over_is_cleared_and_has_another_name_when_it_comes_back():
    raised: dict[str, int] = {}
    first, _ = look_again((), [LEVEL], raised, "22:00")
    gone, news = look_again(first, [], raised, "23:00")
    again, _ = look_again(gone, [LEVEL], raised, "24:00")

    assert gone == ()
    assert [(change.became, change.warning.name) for change in news] == [("cleared", "level-1")]
    assert again[0].name == "level-2"


def test_an_acknowledged_warning_stays_so_until_it_gets_worse():
    raised: dict[str, int] = {}
    first, _ = look_again((), [LEVEL], raised, "22:00")
    seen = acknowledge(first, "level-1", "Kim", "22:05")
    same, _ = look_again(seen, [replace(LEVEL, what="fell by 6.0 %")], raised, "23:00")
    worse, news = look_again(same, [replace(LEVEL, wakes=True)], raised, "24:00")

    assert (same[0].acknowledged_by, same[0].acknowledged_utc) == ("Kim", "22:05")
    assert worse[0].acknowledged_by == ""
    assert [change.became for change in news] == ["worse"]


def test_only_the_named_warning_is_acknowledged_and_all_of_them_without_a_name():
    both, _ = look_again((), [LEVEL, replace(LEVEL, kind="excess")], {}, "22:00")

    one = acknowledge(both, "excess-1", "Kim", "22:05")
    every = acknowledge(both, "", "Kim", "22:05")

    assert [warning.acknowledged_by for warning in one] == ["", "Kim"]
    assert [warning.acknowledged_by for warning in every] == ["Kim", "Kim"]
