"""The journal: visits that are not sealed yet, in SQLite; a row is given back only when it is durable.

Write-ahead log with full synchronisation: one write and one fdatasync a visit. There is one writer, and it
alone checkpoints, which keeps clear of the WAL-reset error of SQLite before 3.51.3 (sqlite.org/wal.html,
"walresetbug": it needs two connections that write or checkpoint at once). Readers open read-only.
"""

from __future__ import annotations

import json
import os
import sqlite3
from collections.abc import Mapping, Sequence
from contextlib import closing, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from urllib.parse import quote

from daq.errors import StorageError
from daq.storage.layout import FORMAT
from daq.storage.rows import Rows
from daq.storage.trouble import rim, stored

JOURNAL = "journal.sqlite"
NEWEST = "newest.txt"  # rows acknowledged, kept a second time: SQLite ends a damaged log without a word
_SETTINGS = (
    "PRAGMA synchronous = FULL",
    "PRAGMA wal_autocheckpoint = 1000",
    "PRAGMA journal_size_limit = 67108864",
    "PRAGMA secure_delete = 0",  # distributions switch it on: freed pages would be zeroed, twice
    "PRAGMA mmap_size = 0",
)


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What a journal held at one moment: rows from `sealed` on, as flat numbers."""

    meta: dict[str, Any]
    sealed: int
    rows: list[tuple[Any, ...]]


class Journal:
    """The one connection that writes. `rows` counts the durable rows, sealed ones included."""

    def __init__(self, folder: Path, form: Rows, sealed: int, rows: int) -> None:
        self.sealed, self.rows = sealed, rows
        self._form, self._where = form, folder / JOURNAL
        self._connection = _connect(self._where, "rw")
        for setting in _SETTINGS:
            self._connection.execute(setting)
        marks = ", ".join("?" * (len(form.names) + 2))
        self._insert = f"INSERT INTO visits VALUES ({marks})"
        self._newest = os.open(folder / NEWEST, os.O_WRONLY | os.O_CREAT | os.O_CLOEXEC, 0o644)

    def append(self, flat: Sequence[Any]) -> int:
        """Make a row durable and return its number; any error leaves the journal as it was."""
        row = self.rows
        crc = self._form.crc(row, flat)
        try:
            self._connection.execute(self._insert, (row, crc, *flat))
        except sqlite3.Error as error:
            raise stored(error, self._where) from error
        self.rows = row + 1
        with suppress(OSError):  # the row is durable all the same
            os.pwrite(self._newest, b"%020d\n" % self.rows, 0)
        return row

    def forget(self, upto: int) -> None:
        """Drop the rows below `upto`, which Zarr holds durably, and move the cursor: one transaction."""
        try:
            self._connection.execute("BEGIN IMMEDIATE")
            self._connection.execute("UPDATE state SET value = ? WHERE name = 'sealed'", (upto,))
            self._connection.execute("DELETE FROM visits WHERE row < ?", (upto,))
            self._connection.execute("COMMIT")
        except sqlite3.Error as error:
            if self._connection.in_transaction:
                self._connection.execute("ROLLBACK")
            raise stored(error, self._where) from error
        self.sealed = upto

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
    with closing(_connect(passing, "rwc")) as connection:
        connection.execute("PRAGMA page_size = 4096")
        connection.execute("PRAGMA auto_vacuum = 0")
        connection.execute("PRAGMA synchronous = FULL")
        names = ", ".join(
            f'"{name}"' for name in form.names
        )  # no types: SQLite then keeps every number as it is
        connection.execute("BEGIN IMMEDIATE")
        connection.execute(f"CREATE TABLE visits (row INTEGER PRIMARY KEY, crc INTEGER NOT NULL, {names})")
        connection.execute("CREATE TABLE state (name TEXT PRIMARY KEY, value)")
        connection.execute("INSERT INTO state VALUES ('sealed', 0), ('meta', ?)", (json.dumps(meta),))
        connection.execute("COMMIT")
        connection.execute("PRAGMA journal_mode = WAL")
    passing.replace(folder / JOURNAL)


def snapshot(folder: Path, stop: int | None = None) -> Snapshot | None:
    """Return what the journal holds now, every row's checksum compared; None where there is no journal.

    Parameters
    ----------
    folder
        The run folder; the writer may be alive.
    stop
        Read the rows below this one only, for sealing.

    Raises
    ------
    StorageError
        For damaged or missing rows.
    """
    newest = _newest(folder)  # before the rows: the writer may go on in between
    path = folder / JOURNAL
    try:
        with closing(_connect(path, "ro")) as connection:
            state, rows = _read(connection, stop)
    except sqlite3.Error as error:
        if not path.exists():  # none, or finished this very moment
            return None
        raise stored(error, path) from error
    meta, sealed = json.loads(state["meta"]), int(state["sealed"])
    check_format(meta, path)
    kept = _checked(Rows(meta), rows, sealed, path)
    if stop is None and sealed + len(kept) < newest:
        raise _ended(path, sealed + len(kept), newest)
    return Snapshot(meta, sealed, kept)


def check_format(meta: Mapping[str, Any], where: Path) -> None:
    """Refuse an archive that a later version of the program wrote."""
    written = meta.get("format", FORMAT)
    if written > FORMAT:
        raise StorageError(
            f"the archive has format {written}, and this program reads formats up to {FORMAT}",
            where=str(where),
            remedy="Read it with the version of tercet that wrote it, or a later one",
        )


def drop_journal(folder: Path) -> None:
    """Remove the journal of a finished run: its file first, for its absence says that the run is finished."""
    for name in (JOURNAL, f"{JOURNAL}-wal", f"{JOURNAL}-shm", NEWEST):
        (folder / name).unlink(missing_ok=True)


def _connect(path: Path, mode: str) -> sqlite3.Connection:
    # On a disk that cannot be written SQLite needs to be told that nothing else writes; with a write-ahead
    # log beside it that would hide visits, so the plain mode then fails and says so.
    wal = path.with_name(f"{path.name}-wal")
    frozen = mode == "ro" and not wal.exists() and not os.access(path.parent, os.W_OK)
    address = f"file:{quote(str(path.absolute()))}?mode={mode}{'&immutable=1' if frozen else ''}"
    return sqlite3.connect(address, uri=True, isolation_level=None, check_same_thread=False, timeout=5.0)


def _read(connection: sqlite3.Connection, stop: int | None) -> tuple[dict[str, Any], list[tuple[Any, ...]]]:
    connection.execute("BEGIN")
    state = dict(connection.execute("SELECT name, value FROM state"))
    limit = stop if stop is not None else 1 << 62
    rows = connection.execute(
        "SELECT * FROM visits WHERE row >= ? AND row < ? ORDER BY row", (state["sealed"], limit)
    ).fetchall()
    connection.execute("COMMIT")
    return state, rows


def _checked(form: Rows, rows: list[tuple[Any, ...]], first: int, where: Path) -> list[tuple[Any, ...]]:
    damaged = [row[0] for row in rows if not _intact(form, row)]
    present = {row[0] for row in rows}
    missing = [
        number for number in range(first, max(present, default=first - 1) + 1) if number not in present
    ]
    if damaged or missing:
        raise StorageError(
            f"rows {_few(sorted(damaged + missing))} of the journal are damaged or missing",
            where=str(where),
            remedy="Keep a copy of the folder; `tercet verify` says which visits are still good",
        )
    return [row[2:] for row in rows]


def _intact(form: Rows, row: tuple[Any, ...]) -> bool:
    try:
        return form.crc(row[0], row[2:]) == row[1]
    except StorageError:
        return False


def _few(numbers: list[int]) -> str:
    shown = ", ".join(map(str, numbers[:5]))
    return shown if len(numbers) <= 5 else f"{shown} and {len(numbers) - 5} more"


def _newest(folder: Path) -> int:
    try:
        return int((folder / NEWEST).read_bytes())
    except (OSError, ValueError):
        return 0


def _ended(where: Path, rows: int, newest: int) -> StorageError:
    return StorageError(
        f"the journal ends after row {rows - 1}, but row {newest - 1} was acknowledged",
        where=str(where),
        remedy="Keep a copy of the folder; the rows up to there are good, see `tercet verify`",
    )
