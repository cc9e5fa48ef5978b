import os

import pytest

from daq.errors import DescriptionError, StorageError
from daq.service.requests import ask, current_run, lapse, open_requests, settle
from daq.storage.feed import write_feed
from daq.storage.lab_book import select
from daq.storage.lock import lock_run

RUN = "20261201T170000Z-lantern"
LATER_DATE = "20271202T170000Z-lantern"


@pytest.fixture
def lab(tmp_path):
    """Return a lab whose run is carried out by somebody."""
    folder = tmp_path / "runs" / RUN
    folder.mkdir(parents=True)
    write_feed(folder, {"ended": None})
    handle = lock_run(folder)
    yield tmp_path
    os.close(handle)


def test_a_request_waits_until_it_is_settled(lab):
    ask(lab, None, "acknowledge", "night watch", "level-1")

    (request,) = open_requests(lab, RUN)
    settle(lab, request, "heard")

    assert (request.what, request.who, request.about) == ("acknowledge", "night watch", "level-1")
    assert open_requests(lab, RUN) == []
    assert select(lab, "requests")[0]["outcome"] == "heard"


def test_the_run_that_goes_on_is_asked_and_not_the_one_with_the_latest_date_in_its_name(lab):
    folder = lab / "runs" / LATER_DATE
    folder.mkdir()
    write_feed(folder, {"ended": {"reason": "complete"}})

    _, name = ask(lab, None, "hold", "night watch")

    assert name == RUN
    assert [request.what for request in open_requests(lab, RUN)] == ["hold"]


def test_without_a_run_that_goes_on_the_one_written_last_is_meant(tmp_path):
    for name, at_s in ((RUN, 200), (LATER_DATE, 100)):
        folder = tmp_path / "runs" / name
        folder.mkdir(parents=True)
        write_feed(folder, {"ended": None})
        os.utime(folder / "live.json", (at_s, at_s))

    assert current_run(tmp_path) == RUN


@pytest.mark.parametrize(
    ("ended", "words"),
    [({"reason": "complete"}, r"it has ended \(complete\)"), (None, "it was broken off")],
)
def test_nothing_is_asked_of_a_run_that_nobody_carries_out(tmp_path, ended, words):
    folder = tmp_path / "runs" / RUN
    folder.mkdir(parents=True)
    write_feed(folder, {"ended": ended})

    with pytest.raises(DescriptionError, match=words):
        ask(tmp_path, None, "hold", "night watch")

    assert select(tmp_path, "requests") == []


def test_what_was_asked_while_nobody_carried_the_run_out_lapses(lab):
    ask(lab, None, "hold", "night watch")

    (gone,) = lapse(lab, RUN, "not heard")

    assert gone.what == "hold"
    assert open_requests(lab, RUN) == []
    assert select(lab, "requests")[0]["outcome"] == "not heard"


def test_a_lab_without_a_run_says_so(tmp_path):
    with pytest.raises(DescriptionError, match="has no run yet"):
        ask(tmp_path, None, "hold", "night watch")


def test_an_unknown_run_or_request_says_so(lab):
    with pytest.raises(DescriptionError, match="has no run elsewhere"):
        ask(lab, "elsewhere", "hold", "night watch")
    with pytest.raises(DescriptionError, match="no request 'explode'"):
        ask(lab, None, "explode", "night watch")


def test_a_book_that_is_no_database_is_a_storage_error(lab):
    (lab / "lab.sqlite").write_bytes(b"this is no database, only a long enough text to be read as one" * 10)

    with pytest.raises(StorageError, match="not a database"):
        open_requests(lab, RUN)
