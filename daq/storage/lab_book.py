"""The lab book: `lab.sqlite`, where processes leave bookings, requests, armings and people."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

from daq.errors import StorageError

BOOK = "lab.sqlite"
BUSY_S = 10.0
VERSION = 3

TABLES = """
CREATE TABLE IF NOT EXISTS bookings (
  id INTEGER PRIMARY KEY, file TEXT NOT NULL, days TEXT NOT NULL, at TEXT NOT NULL, zone TEXT NOT NULL,
  first_day TEXT NOT NULL, late_s REAL NOT NULL, end_at TEXT, wishes TEXT NOT NULL, who TEXT NOT NULL,
  made_utc TEXT NOT NULL, cancelled_utc TEXT);
CREATE TABLE IF NOT EXISTS starts (
  id INTEGER PRIMARY KEY, booking INTEGER NOT NULL, due_utc TEXT NOT NULL, utc TEXT NOT NULL,
  outcome TEXT NOT NULL, run TEXT, UNIQUE (booking, due_utc));
CREATE TABLE IF NOT EXISTS requests (
  id INTEGER PRIMARY KEY, run TEXT NOT NULL, what TEXT NOT NULL, who TEXT NOT NULL, utc TEXT NOT NULL,
  settled_utc TEXT, outcome TEXT, about TEXT NOT NULL DEFAULT '');
CREATE TABLE IF NOT EXISTS armings (
  id INTEGER PRIMARY KEY, file TEXT NOT NULL, sha256 TEXT NOT NULL, who TEXT NOT NULL, utc TEXT NOT NULL,
  expires_utc TEXT NOT NULL, used_utc TEXT, without TEXT NOT NULL DEFAULT '{}');
CREATE TABLE IF NOT EXISTS messages (
  id INTEGER PRIMARY KEY, utc TEXT NOT NULL, kind TEXT NOT NULL, subject TEXT NOT NULL, body TEXT NOT NULL,
  sent_utc TEXT, error TEXT);
CREATE TABLE IF NOT EXISTS people (
  id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE, role TEXT NOT NULL, hash TEXT NOT NULL,
  since_utc TEXT NOT NULL);
CREATE TABLE IF NOT EXISTS sessions (
  id INTEGER PRIMARY KEY, token_sha256 TEXT NOT NULL UNIQUE, name TEXT NOT NULL, since_utc TEXT NOT NULL,
  expires_utc TEXT NOT NULL);
"""
# What came later: what a request is about (the warning to acknowledge); what an arming does without, and why.
LATER = (
    ("requests", "about", "TEXT NOT NULL DEFAULT ''"),
    ("armings", "without", "TEXT NOT NULL DEFAULT '{}'"),
)


@contextmanager
def lab_book(lab: Path) -> Iterator[sqlite3.Connection]:
    """Give a connection to a lab's book; what is done with it is committed at the end, or not at all.

    Raises
    ------
    StorageError
        When the book cannot be opened, read or written.
    """
    path = lab / BOOK
    try:
        lab.mkdir(parents=True, exist_ok=True)
        connection = sqlite3.connect(path, timeout=BUSY_S)
        connection.row_factory = sqlite3.Row
        try:
            _bring_up(connection)
            with connection:
                yield connection
        finally:
            connection.close()
    except (sqlite3.Error, OSError) as error:
        raise StorageError(
            str(error), where=str(path), remedy="Check that the lab folder is whole"
        ) from error


def _bring_up(connection: sqlite3.Connection) -> None:
    """Make the tables of this version, whatever is there already."""
    (version,) = connection.execute("PRAGMA user_version").fetchone()
    if version >= VERSION:
        return
    connection.execute("BEGIN IMMEDIATE")  # only one process does this
    (version,) = connection.execute("PRAGMA user_version").fetchone()
    for statement in TABLES.split(";") if version < VERSION else ():
        connection.execute(statement)
    for table, column, form in LATER if version < VERSION else ():
        known = {row["name"] for row in connection.execute(f"PRAGMA table_info({table})")}
        if column not in known:
            connection.execute(f"ALTER TABLE {table} ADD COLUMN {column} {form}")
    connection.execute(f"PRAGMA user_version = {VERSION}")
    connection.commit()


def insert(lab: Path, table: str, **fields: Any) -> int:
    """Insert one row into a table of the book and return its id."""
    names, marks = ", ".join(fields), ", ".join("?" for _ in fields)
    with lab_book(lab) as book:
        row = book.execute(f"INSERT INTO {table} ({names}) VALUES ({marks})", tuple(fields.values()))
        return int(row.lastrowid or 0)


def select(lab: Path, table: str, where: str = "1", values: tuple[Any, ...] = ()) -> list[dict[str, Any]]:
    """Return the rows of a table that fulfil a condition, oldest first."""
    if not (lab / BOOK).exists():
        return []
    with lab_book(lab) as book:
        rows = book.execute(f"SELECT * FROM {table} WHERE {where} ORDER BY id", values).fetchall()
    return [dict(row) for row in rows]


def update(lab: Path, table: str, row: int, **fields: Any) -> None:
    """Change fields of one row."""
    changes = ", ".join(f"{name} = ?" for name in fields)
    with lab_book(lab) as book:
        book.execute(f"UPDATE {table} SET {changes} WHERE id = ?", (*fields.values(), row))
