"""Reading the journal at any moment, its writer alive or not, every row compared with its checksum."""

from __future__ import annotations

import json
import os
import sqlite3
from collections.abc import Mapping
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Any
from urllib.parse import quote

from daq.errors import StorageError
from daq.storage.layout import FORMAT
from daq.storage.rows import Rows
from daq.storage.trouble import stored

JOURNAL = "journal.sqlite"
NEWEST = "newest.txt"  # rows acknowledged, kept a second time: SQLite ends a damaged log without a word


@dataclass(frozen=True, slots=True)
class Snapshot:
    """What a journal held at one moment: rows from `sealed` on, as flat numbers."""

    meta: dict[str, Any]
    sealed: int
    rows: list[tuple[Any, ...]]
    events_sealed: int = 0


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
    newest = newest_rows(folder)  # before the rows: the writer may go on in between
    path = folder / JOURNAL
    try:
        with closing(connect(path, "ro")) as connection:
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
    return Snapshot(meta, sealed, kept, int(state["events_sealed"]))


def good_rows(folder: Path) -> Snapshot | None:
    """Return the rows of a damaged journal that are good, one by one; None where SQLite cannot read any."""
    newest = newest_rows(folder)
    try:
        with closing(connect(folder / JOURNAL, "ro")) as connection:
            state = dict(connection.execute("SELECT name, value FROM state"))
            meta, sealed = json.loads(state["meta"]), int(state["sealed"])
            check_format(meta, folder / JOURNAL)
            form, upto = Rows(meta), max(newest, sealed + 2 * int(meta["chunk"]))
            rows = [row for number in range(sealed, upto) for row in _row(connection, number)]
    except (sqlite3.Error, ValueError, KeyError):
        return None
    good = [row[2:] for row in rows if _intact(form, row)]
    return Snapshot(meta, sealed, good, int(state["events_sealed"]))


def _row(connection: sqlite3.Connection, number: int) -> list[tuple[Any, ...]]:
    """Return one row as a list, empty where it is not there or its page cannot be read."""
    try:
        return connection.execute("SELECT * FROM visits WHERE row = ?", (number,)).fetchall()
    except sqlite3.DatabaseError:
        return []


def check_format(meta: Mapping[str, Any], where: Path) -> None:
    """Refuse an archive that a later version of the program wrote."""
    written = meta.get("format", FORMAT)
    if written > FORMAT:
        raise StorageError(
            f"the archive has format {written}, and this program reads formats up to {FORMAT}",
            where=str(where),
            remedy="Read it with the version of tercet that wrote it, or a later one",
        )


def newest_rows(folder: Path) -> int:
    """Return how many rows were acknowledged, as the second place says; 0 where it says nothing."""
    try:
        return int((folder / NEWEST).read_bytes())
    except (OSError, ValueError):
        return 0


def connect(path: Path, mode: str) -> sqlite3.Connection:
    """Return a connection to a journal: "ro" for readers, "rw" and "rwc" (made new) for the one writer."""
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


def _ended(where: Path, rows: int, newest: int) -> StorageError:
    return StorageError(
        f"the journal ends after row {rows - 1}, but row {newest - 1} was acknowledged",
        where=str(where),
        remedy=f"Keep a copy of the folder; to go on with the rows that are good, remove {NEWEST}",
    )
