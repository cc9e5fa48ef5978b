"""Reading a run at any time: sealed or not, finished or not, its writer alive or not."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
import zarr
from numpy.typing import NDArray
from zarr.storage import LocalStore

from daq.errors import StorageError
from daq.estimate.use import use
from daq.storage.layout import EVENTS, Column, columns, looked_up, planned
from daq.storage.rows import Rows
from daq.storage.seal import FINISHED, ITINERARY, ZARR
from daq.storage.snapshot import Snapshot, check_format, snapshot
from daq.storage.trouble import LIBRARY_ERRORS, stored


def open_visits(folder: Path) -> xr.Dataset:
    """Return all visits of a run in the order in which they were committed, dimension `row`.

    Notes
    -----
    A chunk of the Zarr group that is missing reads as missing numbers (-1, NaN), never as counts or openings;
    a visit of which a part is missing is set aside as unplanned (-1), so that no estimate takes its stand.
    In list mode a finished run gives its events too, lazily; `read_events` gives those of a row at any time.

    Raises
    ------
    StorageError
        When there is no run, or a part of it is damaged; the sentence says which.
    """
    root, held, meta = _opened(Path(folder))
    arrays = _set_aside_incomplete(_measured(root, held, meta))
    arrays.update(_looked_up(root, arrays, meta))
    dataset = _dataset((*columns(meta), *looked_up()), arrays, meta)
    if meta.get("list_mode") and held is None:
        plain = xr.open_zarr(Path(folder) / ZARR, chunks=None, consolidated=False)
        return dataset.assign({EVENTS: plain[EVENTS].variable})
    return dataset


def open_itinerary(folder: Path) -> xr.Dataset:
    """Return what was planned: dimension `planned` (visits) and `position` (weights and signs)."""
    root, _, meta = _opened(Path(folder), rows=0)
    table = planned(int(meta["slits"]), meta["signs"])
    return _dataset(
        table, {column.name: _whole(root, f"{ITINERARY}/{column.name}") for column in table}, meta
    )


def read_meta(folder: Path) -> dict[str, Any]:
    """Return what the run is: its meta data, with its results once it is finished."""
    return _opened(Path(folder), rows=0)[2]


def planned_stands(folder: Path) -> NDArray[np.int64]:
    """Return the stand of every planned visit."""
    return _whole(_opened(Path(folder), rows=0)[0], f"{ITINERARY}/stand")


def tries_so_far(folder: Path, held: Snapshot) -> Iterator[tuple[int, int]]:
    """Yield visit and attempt of every row, those sealed in the Zarr group first."""
    if held.sealed:
        root = _opened(folder, rows=0)[0]
        visit, attempt = (_whole(root, name, held.sealed).tolist() for name in ("visit", "attempt"))
        yield from zip(visit, attempt, strict=True)
    yield from ((row[0], row[1]) for row in held.rows)  # the table of columns begins with these two


def _opened(folder: Path, rows: int | None = None) -> tuple[zarr.Group, Snapshot | None, dict[str, Any]]:
    """Return the Zarr group, what the journal holds (rows below `rows`) and the meta data."""
    if not folder.is_dir():
        raise StorageError("there is no such run", where=str(folder), remedy="Check the path")
    held = snapshot(folder, rows)
    try:
        store = LocalStore(folder / ZARR, read_only=True)
        root = zarr.open_group(store, mode="r", use_consolidated=False)
        meta = held.meta if held else dict(root.attrs.asdict())
    except (OSError, ValueError, KeyError) as error:
        if held is None and isinstance(error, FileNotFoundError):
            raise never_begun(folder) from error
        raise stored(error, folder / ZARR) from error
    if held is None and not meta.get(FINISHED):
        raise never_begun(folder)
    check_format(meta, folder)
    return root, held, meta


def never_begun(folder: Path) -> StorageError:
    """Return the error for a folder that was left before its journal was whole."""
    return StorageError(
        "the run was broken off while its folder was being made, so it holds no visit",
        where=str(folder),
        remedy="Remove the folder and start the run again",
    )


def _whole(group: zarr.Group, name: str, stop: int | None = None) -> NDArray[Any]:
    try:
        return np.asarray(group[name][:stop])  # type: ignore[index]
    except LIBRARY_ERRORS as error:
        raise stored(error, f"{group.store_path}/{name}") from error


def _measured(root: zarr.Group, held: Snapshot | None, meta: dict[str, Any]) -> dict[str, NDArray[Any]]:
    names = [column.name for column in columns(meta)]
    if held is None:
        return {name: _whole(root, name) for name in names}
    tail = Rows(meta).arrays(held.rows)
    if not held.sealed:
        return tail
    return {name: np.concatenate([_whole(root, name, held.sealed), tail[name]]) for name in names}


def _set_aside_incomplete(arrays: dict[str, NDArray[Any]]) -> dict[str, NDArray[Any]]:
    parts = [arrays[name] for name in ("attempt", "opening", "position_mm", "live_s", "quality")]
    parts += list(arrays["values"].T)
    missing = np.any([part < 0 if part.dtype.kind == "i" else np.isnan(part) for part in parts], axis=0)
    return {**arrays, "visit": np.where(missing, -1, arrays["visit"])}


def _looked_up(
    root: zarr.Group, arrays: dict[str, NDArray[Any]], meta: dict[str, Any]
) -> dict[str, NDArray[Any]]:
    visit = arrays["visit"]
    names = ("stand", "lap", "pair", "forward")
    found = {name: _by_visit(_whole(root, f"{ITINERARY}/{name}"), visit) for name in names}
    known = found["stand"] >= 0
    rows = (found["stand"], arrays["attempt"], visit, arrays["quality"])
    taken = np.zeros(len(visit), np.int64)
    stand, attempt, number, quality = (column[known] for column in rows)
    taken[known] = use(stand, attempt, number, quality, meta.get("visits_per_stand", len(meta["openings"])))
    return {**found, "use": taken}


def _by_visit(column: NDArray[np.int64], visit: NDArray[np.int64]) -> NDArray[np.int64]:
    known = (visit >= 0) & (visit < len(column))
    return np.where(known, column[np.where(known, visit, 0)], -1)


def _dataset(table: tuple[Column, ...], arrays: dict[str, NDArray[Any]], meta: dict[str, Any]) -> xr.Dataset:
    variables = {
        column.name: (
            column.dims,
            arrays[column.name],
            {"units": column.units, "long_name": column.long_name, **column.attributes},
        )
        for column in table
    }
    return xr.Dataset(variables, attrs=meta)
