"""The journal: visits that are not sealed yet, in SQLite; a row is given back only when it is durable.

Write-ahead log with full synchronisation: one write and one fdatasync a visit. There is one writer, and it
alone checkpoints, which keeps clear of the WAL-reset error of SQLite before 3.51.3 (sqlite.org/wal.html,
"walresetbug": it needs two connections that write or checkpoint at once). Readers open read-only.
"""

from __future__ import annotations

import json
import os
import sqlite3
import zlib
from collections.abc import Iterator, Mapping, Sequence
from contextlib import closing, suppress
from pathlib import Path
from typing import Any

from daq.storage.events import Piece
from daq.storage.rows import Rows
from daq.storage.snapshot import JOURNAL, NEWEST, connect
from daq.storage.trouble import rim, stored

_SETTINGS = (
    "PRAGMA synchronous = FULL",
    "PRAGMA wal_autocheckpoint = 1000",
    "PRAGMA journal_size_limit = 67108864",
    "PRAGMA secure_delete = 0",  # distributions switch it on: freed pages would be zeroed, twice
    "PRAGMA mmap_size = 0",
)


class Journal:
    """The one connection that writes. `rows` counts the durable rows, sealed ones included."""

    def __init__(self, folder: Path, form: Rows, sealed: int, rows: int) -> None:
        self.sealed, self.rows = sealed, rows
        self._form, self._where = form, folder / JOURNAL
        self._connection = connect(self._where, "rw")
        for setting in _SETTINGS:
            self._connection.execute(setting)
        marks = ", ".join("?" * (len(form.names) + 2))
        self._insert = f"INSERT INTO visits VALUES ({marks})"
        self._newest = os.open(folder / NEWEST, os.O_WRONLY | os.O_CREAT | os.O_CLOEXEC, 0o644)

    def append(self, flat: Sequence[Any], piece: Piece | None = None) -> int:
        """Make a row durable, with its events, and return its number; any error leaves all as it was."""
        row = self.rows
        numbers = (row, self._form.crc(row, flat), *flat)
        if piece is None:
            self._transact((self._insert, numbers))
        else:
            self._transact(*_events_of(row, piece), (self._insert, numbers))
        self.rows = row + 1
        with suppress(OSError):  # the row is durable all the same
            os.pwrite(self._newest, b"%020d\n" % self.rows, 0)
        return row

    def forget(self, upto: int) -> None:
        """Drop the rows below `upto`, which Zarr holds durably, and move the cursor: one transaction."""
        self._transact(
            ("UPDATE state SET value = ? WHERE name = 'sealed'", (upto,)),
            ("DELETE FROM visits WHERE row < ?", (upto,)),
        )
        self.sealed = upto

    def _transact(self, *statements: tuple[str, Sequence[Any]]) -> None:
        connection = self._connection
        try:
            if len(statements) > 1:  # one alone is a transaction of itself
                connection.execute("BEGIN IMMEDIATE")
            for statement, values in statements:
                connection.execute(statement, values)
            if len(statements) > 1:
                connection.execute("COMMIT")
        except sqlite3.Error as error:
            if connection.in_transaction:
                connection.execute("ROLLBACK")
            raise stored(error, self._where) from error

    def recount(self) -> None:
        """Look up how many rows are durable, after something broke in between a commit and its note."""
        with rim(self._where):
            newest = self._connection.execute("SELECT max(row) FROM visits").fetchone()[0]
        self.rows = self.sealed if newest is None else newest + 1

    def setting(self, name: str) -> int:
        """Return a setting of the connection, as SQLite tells it."""
        return int(self._connection.execute(f"PRAGMA {name}").fetchone()[0])

    def checkpoint(self) -> None:
        """Move everything from the write-ahead log into the database file."""
        with rim(self._where):
            self._connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")

    def close(self) -> None:
        """Let the connection go."""
        self._connection.close()
        if self._newest >= 0:
            os.close(self._newest)
            self._newest = -1


def create_journal(folder: Path, form: Rows, meta: Mapping[str, Any]) -> None:
    """Write an empty journal; its name appears when it is whole, so a journal is never half created."""
    passing = folder / f"{JOURNAL}.partial"
    (folder / NEWEST).write_bytes(b"%020d\n" % 0)
    with closing(connect(passing, "rwc")) as connection:
        connection.execute("PRAGMA page_size = 4096")
        connection.execute("PRAGMA auto_vacuum = 0")
        connection.execute("PRAGMA synchronous = FULL")
        # Columns without a type: SQLite then keeps every number as it is.
        names = ", ".join(f'"{name}"' for name in form.names)
        connection.execute("BEGIN IMMEDIATE")
        connection.execute(f"CREATE TABLE visits (row INTEGER PRIMARY KEY, crc INTEGER NOT NULL, {names})")
        connection.execute("CREATE TABLE state (name TEXT PRIMARY KEY, value)")
        connection.execute("CREATE TABLE events (row INTEGER PRIMARY KEY, crc INTEGER NOT NULL, gaps BLOB)")
        connection.execute(
            "INSERT INTO state VALUES ('sealed', 0), ('events_sealed', 0), ('meta', ?)", (json.dumps(meta),)
        )
        connection.execute("COMMIT")
        connection.execute("PRAGMA journal_mode = WAL")
    passing.replace(folder / JOURNAL)


def drop_journal(folder: Path) -> None:
    """Remove the journal of a finished run: its file first, for its absence says that the run is finished."""
    for name in (JOURNAL, f"{JOURNAL}-wal", f"{JOURNAL}-shm", NEWEST):
        (folder / name).unlink(missing_ok=True)


def _events_of(row: int, piece: Piece) -> Iterator[tuple[str, Sequence[Any]]]:
    if piece.moved:
        yield "UPDATE state SET value = ? WHERE name = 'events_sealed'", (piece.sealed,)
        yield "DELETE FROM events", ()
    if len(piece.rest):
        packed = piece.packed
        yield "INSERT INTO events VALUES (?, ?, ?)", (row, zlib.crc32(packed), packed)
