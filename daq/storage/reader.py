"""Reading a run at any time: sealed or not, finished or not, its writer alive or not."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from daq.errors import StorageError
from daq.estimate.blinding import OPEN
from daq.estimate.dataset import HIDDEN
from daq.estimate.use import use
from daq.storage.absent import no_run
from daq.storage.blinding import blinding_of
from daq.storage.chunks import read_column
from daq.storage.layout import EVENTS, FINISHED, ITINERARY, ZARR, Column, columns, looked_up, planned
from daq.storage.rows import Rows
from daq.storage.salvage import Problems, root_meta, salvaged
from daq.storage.seal import open_array
from daq.storage.snapshot import Snapshot, check_format, snapshot
from daq.storage.trouble import LIBRARY_ERRORS

SALVAGE = "`tercet report` gives what is still good, `tercet verify` names every damage"
_BY_VISIT = tuple(column for column in planned(1, {}) if column.name in ("stand", "lap", "pair", "forward"))
# Without one of these a visit cannot be taken.
_NEEDED = (
    *("visit", "attempt", "opening", "position_mm", "dwell_s", "live_s", "quality"),
    *("gate_open_ns", "gate_close_ns"),
)


def open_visits(folder: Path, *, salvage: bool = False) -> xr.Dataset:
    """Return all visits of a run in the order in which they were committed, dimension `row`.

    Parameters
    ----------
    folder
        The run; it may be going on.
    salvage
        Of a damaged run return what is still good, with one sentence for each damage in the attribute
        `damaged`. What is lost reads as missing (-1, NaN), never as counts or openings; a visit of which a
        part is lost is set aside as unplanned (-1), so that no estimate takes its stand.

    Notes
    -----
    The counts are told as they are, blinded or not; the blinding that the dataset carries makes
    `estimate_run` hide what is hidden.
    In list mode a finished run gives its events too, lazily; `read_events` gives those of a row at any time.

    Raises
    ------
    StorageError
        When there is no run, or a part of it is damaged; the sentence says which.
    """
    folder = Path(folder)
    held, problems = salvaged(folder) if salvage else (_whole(folder), {})
    found, lost = _measured(folder, held)
    plan, lost_plan = _planned(folder, _BY_VISIT)
    problems |= lost | lost_plan
    if problems and not salvage:
        raise _damaged(folder, list(problems.values()))
    meta = held.meta | ({"damaged": list(problems.values())} if problems else {})
    arrays = _set_aside_incomplete(found)
    arrays.update(_looked_up(plan, arrays, meta))
    blinding = blinding_of(folder, meta)
    seen = {**meta, "blinding": blinding.state, HIDDEN: blinding} if blinding.state != OPEN else meta
    dataset = dataset_of((*columns(meta), *looked_up()), arrays, seen)
    if meta.get("list_mode") and meta.get(FINISHED) and not problems:
        plain = xr.open_zarr(folder / ZARR, chunks=None, consolidated=False)
        return dataset.assign({EVENTS: plain[EVENTS].variable})
    return dataset


def open_itinerary(folder: Path) -> xr.Dataset:
    """Return what was planned: dimension `planned` (visits) and `position` (weights and signs)."""
    meta = read_meta(folder)
    table = planned(int(meta["slits"]), meta["signs"])
    return dataset_of(table, _intact_plan(Path(folder), table), meta)


def read_meta(folder: Path) -> dict[str, Any]:
    """Return what the run is: its meta data, with its results once it is finished."""
    return _whole(Path(folder), rows=0).meta


def planned_stands(folder: Path) -> NDArray[np.int64]:
    """Return the stand of every planned visit."""
    return _intact_plan(folder, [column for column in _BY_VISIT if column.name == "stand"])["stand"]


def tries_so_far(folder: Path, held: Snapshot) -> Iterator[tuple[int, int]]:
    """Yield visit and attempt of every row, those sealed in the Zarr group first."""
    if held.sealed:
        sealed = [read_column(folder, column, held.sealed) for column in columns(held.meta)[:2]]
        if lost := [one.what for _, losses in sealed for one in losses]:
            raise _damaged(folder, lost)
        yield from zip(*(values.tolist() for values, _ in sealed), strict=True)
    yield from ((row[0], row[1]) for row in held.rows)  # the table of columns begins with these two


def _whole(folder: Path, rows: int | None = None) -> Snapshot:
    """Return what the run holds, its journal's rows (below `rows`) compared with their checksums."""
    held = snapshot(folder, rows) if folder.is_dir() else None
    if held is not None:
        return held
    try:
        meta = root_meta(folder)
    except LIBRARY_ERRORS as error:
        raise no_run(folder) from error
    if not meta.get(FINISHED):
        raise no_run(folder)
    check_format(meta, folder)
    return Snapshot(meta, 0 if rows == 0 else open_array(folder, "visit").shape[0], [])


def _damaged(folder: Path, problems: list[str]) -> StorageError:
    more = f", and {len(problems) - 1} more" if len(problems) > 1 else ""
    return StorageError(f"{problems[0]}{more}", where=str(folder), remedy=SALVAGE)


def _measured(folder: Path, held: Snapshot) -> tuple[dict[str, NDArray[Any]], Problems]:
    """Return the measured columns, sealed rows first, and what of them is lost."""
    arrays, problems = Rows(held.meta).arrays(held.rows), Problems()
    for column in columns(held.meta) if held.sealed else ():
        sealed, lost = read_column(folder, column, held.sealed)
        problems |= {one.file: one.what for one in lost}
        arrays[column.name] = np.concatenate([sealed, arrays[column.name]]) if held.rows else sealed
    return arrays, problems


def _planned(folder: Path, table: Iterable[Column]) -> tuple[dict[str, NDArray[Any]], Problems]:
    """Return columns of the itinerary, and what of them is lost."""
    arrays, problems = dict[str, NDArray[Any]](), Problems()
    for column in table:
        arrays[column.name], lost = read_column(folder, column, group=f"{ITINERARY}/")
        problems |= {one.file: one.what for one in lost}
    return arrays, problems


def _intact_plan(folder: Path, table: Iterable[Column]) -> dict[str, NDArray[Any]]:
    arrays, problems = _planned(folder, table)
    if problems:
        raise _damaged(folder, list(problems.values()))
    return arrays


def _set_aside_incomplete(arrays: dict[str, NDArray[Any]]) -> dict[str, NDArray[Any]]:
    parts = [arrays[name] for name in _NEEDED]
    parts += list(arrays["values"].T)
    missing = np.any([part < 0 if part.dtype.kind == "i" else np.isnan(part) for part in parts], axis=0)
    return {**arrays, "visit": np.where(missing, -1, arrays["visit"])}


def _looked_up(
    plan: dict[str, NDArray[Any]], arrays: dict[str, NDArray[Any]], meta: dict[str, Any]
) -> dict[str, NDArray[Any]]:
    visit = arrays["visit"]
    found = {name: _by_visit(column, visit) for name, column in plan.items()}
    known = found["stand"] >= 0
    rows = (found["stand"], arrays["attempt"], visit, arrays["quality"])
    taken = np.zeros(len(visit), np.int64)
    stand, attempt, number, quality = (column[known] for column in rows)
    taken[known] = use(stand, attempt, number, quality, meta.get("visits_per_stand", len(meta["openings"])))
    return {**found, "use": taken}


def _by_visit(column: NDArray[np.int64], visit: NDArray[np.int64]) -> NDArray[np.int64]:
    known = (visit >= 0) & (visit < len(column))
    return np.where(known, column[np.where(known, visit, 0)], -1)


def dataset_of(
    table: tuple[Column, ...], arrays: dict[str, NDArray[Any]], meta: dict[str, Any]
) -> xr.Dataset:
    """Return columns as a dataset, with their units, and the meta data as its attributes."""
    variables = {
        column.name: (
            column.dims,
            arrays[column.name],
            {"units": column.units, "long_name": column.long_name, **column.attributes},
        )
        for column in table
    }
    return xr.Dataset(variables, attrs=meta)
