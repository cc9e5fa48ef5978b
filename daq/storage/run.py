"""A run's archive while it is written: created, gone on with after a break, finished."""

from __future__ import annotations

import os
import threading
import warnings
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any, Self

import zarr

from daq.errors import StorageError
from daq.records import Reading
from daq.storage.begin import plain, write_beginning
from daq.storage.digest import digest, gate_digest
from daq.storage.disk import Disk
from daq.storage.events import Events
from daq.storage.journal import Journal, drop_journal
from daq.storage.layout import CHUNK, FINISHED, ZARR, looked_up
from daq.storage.lock import LOCK, lock_run
from daq.storage.manifest import write_manifest
from daq.storage.reader import open_visits, planned_stands, read_meta, tries_so_far
from daq.storage.rows import Rows
from daq.storage.seal import DurableStore, add_array, open_root, write_rows
from daq.storage.sealer import Sealer
from daq.storage.snapshot import JOURNAL, snapshot
from daq.storage.trouble import rim

if TYPE_CHECKING:
    from daq.itinerary.compose import Itinerary


class Archive:
    """The one writer of a run: a sink for readings that keeps the run's folder until it is closed."""

    def __init__(self, folder: Path, lock: int, disk: Disk) -> None:
        held = snapshot(folder)
        if held is None:
            raise _no_journal(folder)
        self.folder, self.meta = folder, held.meta
        self._disk, self._lock_file, self._open = disk, lock, True
        self._form, self._chunk = Rows(held.meta), int(held.meta["chunk"])
        self._stands = planned_stands(folder).tolist()
        self._tries: dict[int, int] = {}
        for visit, attempt in tries_so_far(folder, held):
            self._note_try(visit, attempt)
        with rim(folder):
            _drop_partial_files(folder)
            self.journal = Journal(folder, self._form, held.sealed, held.sealed + len(held.rows))
        self._events = Events(folder, self.meta, disk) if self.meta.get("list_mode") else None
        self._mutex = threading.Lock()  # one transaction at a time on the one connection
        self._sealing = threading.Lock()  # one seal at a time, whoever asks for it
        self._sealer = Sealer(self.seal_next)
        self._sealer.wake()

    @property
    def rows(self) -> int:
        """The number of readings that are durable."""
        return self.journal.rows

    @property
    def sealed(self) -> int:
        """The number of readings that left the journal for the Zarr group."""
        return self.journal.sealed

    @property
    def seal_error(self) -> StorageError | None:
        """Why the last seal failed; the visits are safe in the journal meanwhile."""
        return self._sealer.error

    def commit(self, reading: Reading) -> int:
        """Make a reading durable and return its row number.

        Raises
        ------
        StorageError
            When it could not be stored; all readings before it are safe, and a later commit may succeed.
        """
        try:
            row = self._append(reading) if self._events is None else self._append_with_events(reading)
        except StorageError:
            raise
        except BaseException:  # Ctrl-C may fall between what SQLite did and what we noted of it
            self._look_up_again()
            raise
        self._disk.step("committed")
        self._note_try(reading.visit, reading.attempt)
        if (row + 1) % min(self._chunk, 64) == 0 and row + 1 - self.journal.sealed >= self._chunk:
            self._sealer.wake()
        return row

    def append_events(self, chunk: bytes) -> None:
        """Take list-mode events of the visit that is being counted."""
        if self._events is None:
            raise StorageError(
                "the run was not begun in list mode",
                where=str(self.folder),
                remedy="Give the archive the counter's tick (`list_mode`)",
            )
        self._events.add(chunk)

    def drop_events(self) -> None:
        """Forget the events of a visit that will not be committed."""
        if self._events is not None:
            self._events.drop()

    def stands_done(self) -> dict[int, int]:
        """Return stand -> tries so far, for every stand with at least one reading."""
        return dict(self._tries)

    def finish(self, attributes: Mapping[str, Any]) -> None:
        """Turn the archive into a plain Zarr group with the run's results as attributes, and close it."""
        self._sealer.close()
        with rim(self.folder):
            while self.seal_next():
                pass
            self.write_rest({**self.meta, **plain(attributes), FINISHED: True})
            write_manifest(self.folder, self.meta["texts_sha256"], self._disk)
            self.journal.checkpoint()
            self.journal.close()
            self._disk.step("rest")
            drop_journal(self.folder)
            self._disk.step("unlinked")
            (self.folder / LOCK).unlink(missing_ok=True)
            self._disk.sync_dir(self.folder)
        self.close()

    def seal_next(self) -> bool:
        """Seal the oldest whole chunk of the journal; return whether there was one. One caller at a time."""
        with self._sealing:
            return self._seal_next()

    def write_rest(self, attributes: Mapping[str, Any]) -> None:
        """Write what is not sealed, what is looked up and the attributes; the journal keeps its rows."""
        held, dataset = snapshot(self.folder), open_visits(self.folder)
        assert held is not None
        root = open_root(self.folder, self._disk)
        arrays = self._form.arrays(held.rows)
        write_rows(root, arrays, held.sealed, arrays)
        if self._events is not None:
            self._events.finish()
        for column in looked_up():
            add_array(root, column, self._chunk)
        names = [column.name for column in looked_up()]
        write_rows(root, names, 0, {name: dataset[name].values for name in names})
        digests = {"digest": digest(dataset), "gate_digest": gate_digest(dataset)}
        root.update_attributes({**attributes, **digests})
        store = root.store
        assert isinstance(store, DurableStore)
        with warnings.catch_warnings():  # in no specification yet, but one file then opens all arrays
            warnings.filterwarnings("ignore", "Consolidated metadata is currently not part")
            zarr.consolidate_metadata(store)
        store.sync()

    def close(self) -> None:
        """Let the folder go; the run can be gone on with later."""
        if self._open:
            self._open = False
            self._sealer.close()
            self.journal.close()
            os.close(self._lock_file)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _look_up_again(self) -> None:
        with self._mutex:
            self.journal.recount()
        if self._events is not None:
            self._events = Events(self.folder, self.meta, self._disk)

    def _append(self, reading: Reading) -> int:
        if reading.events is not None:
            self.append_events(reading.events)  # refused: there is no column for them
        flat = self._form.flat(reading)
        with self._mutex:
            return self.journal.append(flat)

    def _append_with_events(self, reading: Reading) -> int:
        assert self._events is not None
        try:
            if reading.events is not None:
                self._events.add(reading.events)
            piece = self._events.write()
            self._disk.step("events")
            flat = self._form.flat(reading, (piece.first, piece.count))
            with self._mutex:
                row = self.journal.append(flat, piece)
            self._events.written(piece)
            return row
        finally:
            self._events.drop()  # a visit that could not be stored is made again, with events of its own

    def _seal_next(self) -> bool:
        first = self.journal.sealed
        if self.journal.rows - first < self._chunk:
            return False
        held = snapshot(self.folder, first + self._chunk)
        assert held is not None
        with rim(self.folder / ZARR):
            arrays = self._form.arrays(held.rows)
            write_rows(open_root(self.folder, self._disk), arrays, first, arrays)
        with self._mutex:
            self.journal.forget(first + self._chunk)
        self._disk.step("forgot")
        return True

    def _note_try(self, visit: int, attempt: int) -> None:
        if 0 <= visit < len(self._stands):
            stand = self._stands[visit]
            self._tries[stand] = max(attempt, self._tries.get(stand, 0))


def create_run(
    folder: Path,
    *,
    texts: Mapping[str, bytes],
    itinerary: Itinerary,
    meta: Mapping[str, Any],
    chunk: int = CHUNK,
    disk: Disk | None = None,
) -> Archive:
    """Return the archive of a new run in `folder`, which is made.

    Parameters
    ----------
    folder
        `lab/runs/<id>`; it must not hold a run already.
    texts
        File name in the folder -> contents, kept verbatim (description, rig, dialects).
    itinerary
        The planned visits, written to the group `itinerary/`.
    meta
        What the run is, JSON; kept as attributes of the Zarr group.
    chunk
        Visits sealed at once.
    disk
        A disk that a test watches.
    """
    disk = disk or Disk()
    with rim(folder):
        folder.mkdir(parents=True, exist_ok=True)
        lock = lock_run(folder)
    try:
        write_beginning(folder, texts, itinerary, {**meta, "chunk": chunk}, disk)
        return Archive(folder, lock, disk)
    except BaseException:
        os.close(lock)
        raise


def open_run(folder: Path, *, disk: Disk | None = None) -> Archive:
    """Return the archive of a run that was broken off, to go on with; no acknowledged visit is missing."""
    if not folder.is_dir():
        raise StorageError("there is no such run", where=str(folder), remedy="Check the path")
    if not (folder / JOURNAL).exists():
        raise _no_journal(folder)
    with rim(folder):
        lock = lock_run(folder)
    try:
        return Archive(folder, lock, disk or Disk())
    except BaseException:
        os.close(lock)
        raise


def _no_journal(folder: Path) -> StorageError:
    read_meta(folder)  # raises unless the run is finished
    return StorageError("the run is finished", where=str(folder), remedy="Start a new run")


def _drop_partial_files(folder: Path) -> None:
    for path in (folder / ZARR).rglob("*.partial"):
        path.unlink(missing_ok=True)
