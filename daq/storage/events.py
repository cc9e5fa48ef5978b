"""List mode: whole chunks of events go straight into Zarr, durably, before the transaction of their visit.

What is left of a visit's events (less than a chunk) goes into the journal with the visit. So most events are
written once, and no visit is acknowledged before its last event is durable.
"""

from __future__ import annotations

import json
import sqlite3
import zlib
from collections.abc import Iterable, Mapping, Sequence
from contextlib import closing
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numcodecs import Blosc
from numpy.typing import NDArray

from daq.errors import StorageError
from daq.storage.disk import Disk
from daq.storage.layout import EVENTS
from daq.storage.reader import open_visits
from daq.storage.seal import open_array, open_root, write_rows
from daq.storage.snapshot import JOURNAL, connect
from daq.storage.trouble import LIBRARY_ERRORS, rim, stored

GROW = 64  # chunks by which the array grows at once: each growth rewrites its metadata
_CODEC = Blosc(cname="lz4", clevel=5, shuffle=Blosc.BITSHUFFLE)


@dataclass(frozen=True, slots=True)
class Piece:
    """What a visit's transaction says of its events: those below `sealed` are in Zarr, `rest` is not."""

    first: int
    count: int
    sealed: int
    rest: NDArray[Any]
    moved: bool  # whole chunks were written, and with them every earlier piece

    @property
    def packed(self) -> bytes:
        """The rest, compressed for the journal."""
        return bytes(_CODEC.encode(np.ascontiguousarray(self.rest)))


class Events:
    """The events that wait for their visit, and the started chunk of those that have one."""

    def __init__(self, folder: Path, meta: Mapping[str, Any], disk: Disk) -> None:
        mode = meta["list_mode"]
        self._where, self._root = folder / EVENTS, open_root(folder, disk)
        self._chunk = int(mode["chunk"])
        self._sealed, pieces = _kept(folder)
        kept = [gaps for row in sorted(pieces) for gaps in pieces[row]]
        self._gaps = np.empty(self._chunk, mode["kind"])  # the started chunk, and room for what comes
        self._filled = sum(map(len, kept))
        self._gaps[: self._filled] = np.concatenate([self._gaps[:0], *kept])
        self._waiting: list[bytes] = []

    def add(self, chunk: bytes) -> None:
        """Take events of the visit being counted: little-endian uint64 ticks since the gate opened."""
        self._waiting.append(chunk)

    def drop(self) -> None:
        """Forget the events of a visit that will not be committed."""
        self._waiting.clear()

    def write(self) -> Piece:
        """Make the whole chunks durable and return what the transaction has to hold.

        Raises
        ------
        StorageError
            For times that do not ascend or do not fit, or a full disk; nothing has changed then.
        """
        ticks = np.frombuffer(self._waiting[0] if len(self._waiting) == 1 else b"".join(self._waiting), "<u8")
        start, stop = self._filled, self._filled + len(ticks)
        self._make_room(stop)
        self._differences(ticks, self._gaps[start:stop])
        whole = stop // self._chunk * self._chunk
        if whole:
            self._put(self._gaps[:whole], grow=GROW * self._chunk)
        rest = self._gaps[whole or start : stop]
        return Piece(self._sealed + start, len(ticks), self._sealed + whole, rest, whole > 0)

    def written(self, piece: Piece) -> None:
        """Take note that the transaction of a piece is durable."""
        self._sealed = piece.sealed
        if piece.moved:
            self._filled = len(piece.rest)
            self._gaps[: self._filled] = piece.rest
        else:
            self._filled += len(piece.rest)

    def finish(self) -> None:
        """Write the started chunk and give the array its true length; the journal keeps its pieces."""
        with rim(self._where):
            self._root[EVENTS].resize((self._sealed + self._filled,))  # type: ignore[union-attr]
        self._put(self._gaps[: self._filled])

    def _make_room(self, length: int) -> None:
        if length > len(self._gaps):
            larger = np.empty(length, self._gaps.dtype)
            larger[: self._filled] = self._gaps[: self._filled]
            self._gaps = larger

    def _differences(self, ticks: NDArray[np.uint64], gaps: NDArray[Any]) -> None:
        if not len(ticks):
            return
        fits = ticks.max() <= np.iinfo(gaps.dtype).max  # then every difference is exact in this type
        times = ticks.view(np.int64)
        gaps[0] = times[0] if fits else -1
        np.subtract(times[1:], times[:-1], out=gaps[1:], casting="same_kind")
        if gaps.min() < 0:
            raise StorageError(
                "the event times do not ascend, or lie too far apart",
                where=f"event {self._sealed + self._filled} and the following",
                remedy="Check the unit of the counter's ticks",
            )

    def _put(self, gaps: NDArray[Any], grow: int = 1) -> None:
        with rim(self._where):
            write_rows(self._root, (EVENTS,), self._sealed, {EVENTS: gaps}, grow=grow)


def read_events(folder: Path, rows: Sequence[int]) -> list[NDArray[np.int64]]:
    """Return the event times of some rows, in ticks since the gate of each opened, sealed or not.

    Raises
    ------
    StorageError
        For a run without list mode, or damaged events.
    """
    journal = (folder / JOURNAL).exists()  # looked up first: a run may be finished at any moment
    visits = open_visits(folder)
    if "event_start" not in visits:
        raise StorageError("the run was not made in list mode", where=str(folder))
    first, count = (visits[name].values[list(rows)] for name in ("event_start", "event_count"))
    try:
        array = open_array(folder, EVENTS)
        sealed, pieces = _kept(folder) if journal else (array.shape[0], {})
        parts = [
            [*_in_zarr(array, int(start), min(int(stop), sealed)), *pieces.get(row, ())]
            for row, start, stop in zip(rows, first, first + count, strict=True)
        ]
    except LIBRARY_ERRORS as error:
        raise stored(error, folder / EVENTS) from error
    return [np.cumsum(np.concatenate([np.empty(0, np.int64), *gaps]), dtype=np.int64) for gaps in parts]


def _in_zarr(array: zarr.Array[Any], start: int, stop: int) -> list[NDArray[Any]]:
    return [np.asarray(array[start:stop])] if start < stop else []


def _kept(folder: Path) -> tuple[int, dict[int, list[NDArray[Any]]]]:
    """Return how many events are sealed, and the pieces of the journal by row."""
    path = folder / JOURNAL
    try:
        with closing(connect(path, "ro")) as connection:
            connection.execute("BEGIN")
            state = dict(connection.execute("SELECT name, value FROM state"))
            rows = connection.execute("SELECT row, crc, gaps FROM events ORDER BY row").fetchall()
    except sqlite3.Error as error:
        raise stored(error, path) from error
    kind = json.loads(state["meta"])["list_mode"]["kind"]
    return int(state["events_sealed"]), {row: [gaps] for row, gaps in _unpacked(rows, kind, path)}


def _unpacked(
    rows: Iterable[tuple[int, int, bytes]], kind: str, where: Path
) -> Iterable[tuple[int, NDArray[Any]]]:
    for row, crc, packed in rows:
        if zlib.crc32(packed) != crc:
            raise StorageError(f"the events of row {row} in the journal are damaged", where=str(where))
        yield row, np.frombuffer(_CODEC.decode(packed), kind)
