"""Reading a run at any time: sealed or not, finished or not, its writer alive or not."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
import zarr
from numpy.typing import NDArray
from zarr.storage import LocalStore

from daq.errors import StorageError
from daq.estimate.use import use
from daq.storage.journal import Snapshot, check_format, snapshot
from daq.storage.layout import Column, columns, looked_up, planned
from daq.storage.rows import Rows
from daq.storage.seal import ITINERARY, ZARR
from daq.storage.trouble import rim, stored


def open_visits(folder: Path) -> xr.Dataset:
    """Return all visits of a run in the order in which they were committed, dimension `row`.

    Notes
    -----
    A chunk of the Zarr group that is missing reads as missing numbers (-1, NaN), never as counts or openings;
    a visit of which a part is missing is set aside as unplanned (-1), so that no estimate takes its stand.

    Raises
    ------
    StorageError
        When there is no run, or a part of it is damaged; the sentence says which.
    """
    folder = Path(folder)
    held = snapshot(folder)
    with rim(folder / ZARR):
        root = _root(folder)
        meta = held.meta if held else dict(root.attrs.asdict())
        _refuse_unfinished(held, meta, folder)
        arrays = _set_aside_incomplete(_measured(root, held, meta))
        arrays.update(_looked_up(root, arrays, meta))
    return _dataset((*columns(meta), *looked_up()), arrays, meta)


def open_itinerary(folder: Path) -> xr.Dataset:
    """Return what was planned: dimension `planned` (visits) and `position` (weights and signs)."""
    meta = read_meta(folder)
    with rim(Path(folder) / ZARR):
        root = _root(Path(folder))
        group = root[ITINERARY]
        table = planned(int(meta["slits"]), meta["signs"])
        return _dataset(table, {column.name: _whole(group, column.name) for column in table}, meta)


def read_meta(folder: Path) -> dict[str, Any]:
    """Return what the run is: its meta data, with its results once it is finished."""
    folder = Path(folder)
    held = snapshot(folder, stop=0)
    with rim(folder / ZARR):
        meta = held.meta if held else dict(_root(folder).attrs.asdict())
    _refuse_unfinished(held, meta, folder)
    return meta


def planned_stands(folder: Path) -> NDArray[np.int64]:
    """Return the stand of every planned visit."""
    with rim(Path(folder) / ZARR):
        return _whole(_root(Path(folder))[ITINERARY], "stand")


def _root(folder: Path) -> zarr.Group:
    return zarr.open_group(LocalStore(folder / ZARR, read_only=True), mode="r", use_consolidated=False)


def _refuse_unfinished(held: Snapshot | None, meta: dict[str, Any], folder: Path) -> None:
    if held is None and not meta.get("finished"):
        raise StorageError(
            "the run was broken off while its folder was being made, so it holds no visit",
            where=str(folder),
            remedy="Remove the folder and start the run again",
        )
    check_format(meta, folder)


def _whole(group: Any, name: str, stop: int | None = None) -> NDArray[Any]:
    try:
        return np.asarray(group[name][:stop])
    except (OSError, ValueError, KeyError, RuntimeError) as error:
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
    group = root[ITINERARY]
    visit = arrays["visit"]
    found = {name: _by_visit(_whole(group, name), visit) for name in ("stand", "lap", "pair", "forward")}
    taken = use(
        found["stand"], arrays["attempt"], arrays["opening"], arrays["quality"], len(meta["openings"])
    )
    return {**found, "use": taken.astype(np.int64)}


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
