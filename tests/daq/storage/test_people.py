"""People and their sessions: who is let in, and until when."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from daq.errors import DescriptionError
from daq.storage.lab_book import BOOK, lab_book, select
from daq.storage.people import Person, add_person, people, person_with, remove_person, set_password
from daq.storage.sessions import end_session, end_sessions, open_session, person_of

WORDS = "four lamps in a row"


@pytest.fixture
def lab(tmp_path: Path) -> Path:
    add_person(tmp_path, "Night watch", "operator", WORDS)
    return tmp_path


def test_somebody_is_known_by_name_and_password(lab: Path) -> None:
    assert person_with(lab, "Night watch", WORDS) == Person("Night watch", "operator")
    assert person_with(lab, "Night watch", WORDS + "s") is None
    assert person_with(lab, "night watch", WORDS) is None


def test_no_password_stands_in_the_lab_book(lab: Path) -> None:
    open_session(lab, "Night watch")

    kept = (lab / BOOK).read_bytes()

    assert WORDS.encode() not in kept
    assert select(lab, "people")[0]["hash"].startswith("$argon2id$")


@pytest.mark.parametrize(
    ("name", "role", "password", "says"),
    [
        ("x", "watcher", WORDS, "is no name"),
        ("<b>bold</b>", "watcher", WORDS, "is no name"),
        ("Night watch", "watcher", WORDS, "is known already"),
        ("Day watch", "owner", WORDS, "there is no role 'owner'"),
        ("Day watch", "watcher", "short", "12 to 200 characters"),
        ("Day watch", "watcher", "x" * 201, "12 to 200 characters"),
    ],
)
def test_what_is_wrong_with_a_person_is_said_and_nothing_changes(
    lab: Path, name: str, role: str, password: str, says: str
) -> None:
    with pytest.raises(DescriptionError, match=says):
        add_person(lab, name, role, password)

    assert people(lab) == [Person("Night watch", "operator")]


def test_a_session_is_its_persons_until_it_is_ended(lab: Path) -> None:
    token, other = open_session(lab, "Night watch"), open_session(lab, "Night watch")

    end_session(lab, token)

    assert person_of(lab, token) is None
    assert person_of(lab, other) == Person("Night watch", "operator")
    assert person_of(lab, "made up") is None


def test_a_session_ends_by_itself(lab: Path) -> None:
    token = open_session(lab, "Night watch")
    past = (datetime.now(UTC) - timedelta(seconds=2)).isoformat(timespec="seconds")

    with lab_book(lab) as book:
        book.execute("UPDATE sessions SET expires_utc = ?", (past,))

    assert person_of(lab, token) is None


def test_a_new_password_ends_the_sessions_of_the_old_one(lab: Path) -> None:
    token = open_session(lab, "Night watch")

    set_password(lab, "Night watch", "another four lamps")

    assert person_of(lab, token) is None
    assert person_with(lab, "Night watch", WORDS) is None
    assert person_with(lab, "Night watch", "another four lamps")


def test_somebody_who_is_let_out_is_out_at_once(lab: Path) -> None:
    token = open_session(lab, "Night watch")

    remove_person(lab, "Night watch")

    assert person_of(lab, token) is None
    assert people(lab) == []


def test_sessions_of_one_or_of_everybody_are_ended(lab: Path) -> None:
    add_person(lab, "Day watch", "watcher", WORDS)
    tokens = [open_session(lab, name) for name in ("Night watch", "Day watch", "Day watch")]

    assert end_sessions(lab, "Day watch") == 2
    assert person_of(lab, tokens[0])
    assert end_sessions(lab) == 1
    assert person_of(lab, tokens[0]) is None


def test_a_person_who_is_not_known_is_a_sentence(lab: Path) -> None:
    with pytest.raises(DescriptionError, match=r"knows no 'Kim'\. It knows: Night watch"):
        remove_person(lab, "Kim")


def test_a_watcher_may_not_what_an_operator_may() -> None:
    assert Person("a", "operator").may("watcher")
    assert not Person("a", "watcher").may("operator")
