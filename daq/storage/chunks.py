"""Chunks of a run's arrays: a whole column, or which of its chunks are lost, with the words for it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import zarr
from numpy.typing import NDArray

from daq.storage.layout import ZARR, Column
from daq.storage.seal import open_array
from daq.storage.trouble import LIBRARY_ERRORS

_ROWS = {"row": "rows", "event": "events", "planned": "planned visits", "position": "positions"}


@dataclass(frozen=True, slots=True)
class Lost:
    """A chunk that is missing or damaged: its file, the rows it held, and a sentence without its stop."""

    file: str
    rows: slice
    what: str


def read_column(
    folder: Path, column: Column, stop: int | None = None, group: str = ""
) -> tuple[NDArray[Any], list[Lost]]:
    """Return an array of a run up to a row, reading as missing where a chunk is lost, and what is lost.

    Parameters
    ----------
    stop
        Rows to read, all of them when None.
    group
        Group of the array, with a slash at its end.
    """
    array = _opened(folder, column, stop, group)
    if isinstance(array, Lost):
        return np.full((stop or 0, *column.shape), column.fill, column.kind), [array]
    rows = array.shape[0] if stop is None else stop
    if rows <= array.shape[0] and all(
        (folder / file).exists() for file, _ in _files(array, column, group, rows)
    ):
        try:
            return np.asarray(array[:rows]), []
        except LIBRARY_ERRORS:
            pass  # some chunk is damaged: each is tried by itself below
    return _pieced(folder, array, column, group, rows)


def lost_chunks(folder: Path, column: Column, stop: int | None = None, group: str = "") -> list[Lost]:
    """Return what is lost of an array; one chunk of it is held at a time."""
    array = _opened(folder, column, stop, group)
    if isinstance(array, Lost):
        return [array]
    rows = array.shape[0] if stop is None else stop
    return [lost for _, _, lost in _tried(folder, array, column, group, rows) if lost]


def _opened(folder: Path, column: Column, stop: int | None, group: str) -> zarr.Array[Any] | Lost:
    try:
        return open_array(folder, group + column.name)
    except LIBRARY_ERRORS as error:
        return _lost(column, f"{ZARR}/{group}{column.name}/zarr.json", slice(0, stop), _why(error))


def _pieced(
    folder: Path, array: zarr.Array[Any], column: Column, group: str, rows: int
) -> tuple[NDArray[Any], list[Lost]]:
    found, losses = np.full((rows, *column.shape), column.fill, column.kind), []
    for at, values, lost in _tried(folder, array, column, group, rows):
        if lost:
            losses.append(lost)
        else:
            found[at] = values
    return found, losses


def _tried(
    folder: Path, array: zarr.Array[Any], column: Column, group: str, rows: int
) -> Iterator[tuple[slice, NDArray[Any] | None, Lost | None]]:
    """Yield rows and values of every chunk, or what is lost of it."""
    for file, at in _files(array, column, group, rows):
        if not (folder / file).exists() or array.shape[0] < at.stop:
            yield at, None, _lost(column, file, at, "is missing")
            continue
        try:
            yield at, np.asarray(array[at]), None
        except LIBRARY_ERRORS as error:
            yield at, None, _lost(column, file, at, _why(error))


def _files(array: zarr.Array[Any], column: Column, group: str, rows: int) -> Iterator[tuple[str, slice]]:
    chunk, deeper = array.chunks[0], "/0" * (array.ndim - 1)
    for number, first in enumerate(range(0, rows, chunk)):
        yield f"{ZARR}/{group}{column.name}/c/{number}{deeper}", slice(first, min(first + chunk, rows))


def _why(error: Exception) -> str:
    """Return what is wrong in words; what the codecs say of it holds raw bytes and is left out."""
    if isinstance(error, FileNotFoundError):
        return "is missing"
    if isinstance(error, OSError) and error.strerror:
        return f"cannot be read ({error.strerror.lower()})"
    return "is damaged (its checksum does not match)" if "checksum" in str(error) else "is damaged"


def _lost(column: Column, file: str, at: slice, why: str) -> Lost:
    span = f" {at.start} to {at.stop - 1}" if at.stop else ""
    return Lost(file, at, f"{file} {why}: {column.name} of {_ROWS[column.dims[0]]}{span} is lost")
