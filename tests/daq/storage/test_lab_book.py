"""The lab book is made, and brought up to the present version, by whoever opens it first."""

import sqlite3
from concurrent.futures import ThreadPoolExecutor

from daq.storage.lab_book import BOOK, VERSION, insert, lab_book, select, update

FIRST = """
CREATE TABLE requests (
  id INTEGER PRIMARY KEY, run TEXT NOT NULL, what TEXT NOT NULL, who TEXT NOT NULL, utc TEXT NOT NULL,
  settled_utc TEXT, outcome TEXT);
INSERT INTO requests (run, what, who, utc) VALUES ('one', 'hold', 'night watch', '2026-12-01T00:00:00Z');
PRAGMA user_version = 1;
"""


def test_what_is_left_is_found_again_and_can_be_changed(tmp_path):
    number = insert(tmp_path, "requests", run="one", what="hold", who="night watch", utc="now")

    update(tmp_path, "requests", number, outcome="heard")

    (row,) = select(tmp_path, "requests", "run = ?", ("one",))
    assert (row["what"], row["outcome"], row["about"]) == ("hold", "heard", "")


def test_a_book_of_version_1_is_brought_up_with_all_that_it_holds(tmp_path):
    with sqlite3.connect(tmp_path / BOOK) as book:
        book.executescript(FIRST)

    insert(tmp_path, "people", name="night watch", role="watcher", hash="x", since_utc="now")

    (row,) = select(tmp_path, "requests")
    assert (row["who"], row["about"]) == ("night watch", "")
    with lab_book(tmp_path) as book:
        assert book.execute("PRAGMA user_version").fetchone()[0] == VERSION


def test_many_who_open_a_new_book_at_once_make_it_once(tmp_path):
    with ThreadPoolExecutor(8) as pool:
        numbers = list(
            pool.map(
                lambda one: insert(tmp_path, "requests", run=str(one), what="hold", who="x", utc="now"),
                range(8),
            )
        )

    assert sorted(numbers) == [1, 2, 3, 4, 5, 6, 7, 8]
