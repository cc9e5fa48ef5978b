import pytest

from daq.errors import DescriptionError, StorageError
from daq.service.requests import ask, open_requests, settle
from daq.storage.lab_book import select

RUN = "20261201T170000Z-lantern"


@pytest.fixture
def lab(tmp_path):
    (tmp_path / "runs" / RUN).mkdir(parents=True)
    return tmp_path


def test_a_request_waits_until_it_is_settled(lab):
    ask(lab, None, "hold", "night watch")

    (request,) = open_requests(lab, RUN)
    settle(lab, request, "heard")

    assert (request.what, request.who) == ("hold", "night watch")
    assert open_requests(lab, RUN) == []
    assert select(lab, "requests")[0]["outcome"] == "heard"


def test_requests_of_other_runs_are_not_heard(lab):
    (lab / "runs" / "20261202T170000Z-lantern").mkdir()

    ask(lab, None, "hold", "night watch")

    assert open_requests(lab, RUN) == []


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
