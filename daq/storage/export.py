"""A finished run in other formats: one CSV table, or NetCDF with CF-like attributes."""

from __future__ import annotations

import csv
import json
from collections.abc import Iterator
from contextlib import contextmanager
from importlib.util import find_spec
from itertools import product
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from daq.errors import StorageError
from daq.estimate.dataset import HIDDEN
from daq.estimate.use import stands_done
from daq.openings import name as opening_name
from daq.storage.layout import EVENTS
from daq.storage.reader import open_itinerary, open_visits
from daq.storage.trouble import rim


def write_csv(folder: Path, target: Path) -> None:
    """Write all visits as CSV (RFC 4180): one line a visit, numbers with every digit, empty where missing.

    Beside the archive's columns stand the opening's name, and weight and planned signs of the position, so
    that the residual can be worked out from this table and the dead time alone.
    """
    columns = dict(_columns(open_visits(folder), open_itinerary(folder)))
    with rim(target), _replaced(target) as passing, passing.open("w", encoding="utf-8", newline="") as file:
        table = csv.writer(file)
        table.writerow(columns)
        table.writerows(zip(*columns.values(), strict=True))


def write_netcdf(folder: Path, target: Path) -> None:
    """Write visits, and the itinerary as a group, as NetCDF; nested meta data become JSON text.

    Raises
    ------
    StorageError
        Also where the optional packages h5netcdf and h5py are not installed.
    """
    if not (find_spec("h5netcdf") and find_spec("h5py")):
        raise StorageError(
            "NetCDF needs the packages h5netcdf and h5py",
            where=str(target),
            remedy="Install them with `pip install h5netcdf h5py`",
        )
    visits, itinerary = _cf(open_visits(folder)), _cf(open_itinerary(folder))
    with rim(target), _replaced(target) as passing:
        visits.to_netcdf(passing, engine="h5netcdf")
        plan = itinerary.drop_attrs(deep=False)
        plan.to_netcdf(passing, engine="h5netcdf", group="itinerary", mode="a")


@contextmanager
def _replaced(target: Path) -> Iterator[Path]:
    """Give a passing name to write to; the target appears when it is whole."""
    passing = target.with_name(f"{target.name}.partial")
    try:
        yield passing
        passing.replace(target)
    finally:
        passing.unlink(missing_ok=True)


def _columns(visits: xr.Dataset, itinerary: xr.Dataset) -> Iterator[tuple[str, list[Any]]]:
    yield "row", list(range(visits.sizes["row"]))
    for name, array in visits.items():
        if name == EVENTS:
            continue  # millions of lines; they are in the Zarr group
        values = array.values
        for place in product(*(range(length) for length in values.shape[1:])):
            yield "_".join((str(name), *map(str, place))), _texts(values.T[place[::-1]] if place else values)
    opening = visits["opening"].values.tolist()
    yield "opening_name", [opening_name(mask) if mask >= 0 else "" for mask in opening]
    yield "pair_complete", _pair_complete(visits, itinerary).tolist()
    at = _position(visits["position_mm"].values, itinerary["positions_mm"].values)
    for name in ("weights", *(str(name) for name in itinerary if str(name).startswith("sign_"))):
        column = itinerary[name].values
        yield name.removesuffix("s"), _texts(np.where(at < 0, np.nan, column[at]))


def _pair_complete(visits: xr.Dataset, itinerary: xr.Dataset) -> NDArray[np.int64]:
    """Return 1 for visits of a pair every planned stand of which is done, else 0."""
    known = visits["stand"].values >= 0
    stand, attempt, number = (visits[name].values[known] for name in ("stand", "attempt", "visit"))
    whole = visits.attrs.get("visits_per_stand", len(visits.attrs["openings"]))
    done = stands_done(stand, attempt, number, whole)
    waiting = ~np.isin(itinerary["stand"].values, done)
    incomplete = np.append(itinerary["pair"].values[waiting], -1)
    return (~np.isin(visits["pair"].values, incomplete)).astype(np.int64)


def _texts(column: NDArray[Any]) -> list[Any]:
    """Return numbers as they are written, the shortest text that reads back the same; missing is empty."""
    missing = column == -1 if column.dtype.kind == "i" else np.isnan(column)
    return ["" if lost else value for value, lost in zip(column.tolist(), missing.tolist(), strict=True)]


def _position(asked: NDArray[np.float64], positions: NDArray[np.float64]) -> NDArray[np.int64]:
    order = np.argsort(positions)
    place = order[np.clip(np.searchsorted(positions[order], asked), 0, len(positions) - 1)]
    return np.where(positions[place] == asked, place, -1)


def _cf(dataset: xr.Dataset) -> xr.Dataset:
    attributes = {name: _cf_value(value) for name, value in dataset.attrs.items() if name != HIDDEN}
    named = {"Conventions": "CF-1.11", **attributes}
    encoding = {name: _encoding(array) for name, array in dataset.items()}
    found = dataset.assign_attrs(named)
    for name, array in found.items():
        array.encoding.update(encoding[name])
        array.attrs.update({key: _cf_flags(value) for key, value in array.attrs.items()})
    return found


def _encoding(array: xr.DataArray) -> dict[str, Any]:
    missing = {"_FillValue": np.nan if array.dtype.kind == "f" else array.dtype.type(-1)}
    return {**missing, "zlib": True, "complevel": 4, "shuffle": True}


def _cf_flags(value: Any) -> Any:
    return np.array(value, np.int64) if isinstance(value, list) else value


def _cf_value(value: Any) -> Any:
    return (
        value if isinstance(value, (str, int, float)) and not isinstance(value, bool) else json.dumps(value)
    )
