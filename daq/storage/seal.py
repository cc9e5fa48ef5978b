"""Sealing: whole chunks of visits go from the journal into plain Zarr v3, durably, then leave the journal."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import zarr
from numcodecs import blosc
from numpy.typing import NDArray
from zarr.codecs import BloscCodec, Crc32cCodec
from zarr.core.array_spec import ArrayConfigParams
from zarr.core.buffer import Buffer
from zarr.storage import LocalStore

from daq.storage.disk import Disk, write_durably
from daq.storage.layout import EVENTS, ITINERARY, ZARR, Column, columns, events, planned

if TYPE_CHECKING:
    from daq.itinerary.compose import Itinerary

blosc.use_threads = False  # a pool of threads for chunks of 32 kB costs more than it gives
_ROW_CODEC = BloscCodec(cname="zstd", clevel=3, shuffle="shuffle")
_EVENT_CODEC = BloscCodec(cname="lz4", clevel=5, shuffle="bitshuffle")
# A chunk of fill values is written too: then a file that is missing is damage.
_CONFIG: ArrayConfigParams = {"write_empty_chunks": True}


class DurableStore(LocalStore):
    """A local store whose files are durable, and that knows which folders have names still to be synced."""

    def __init__(self, root: Path, disk: Disk | None = None, *, read_only: bool = False) -> None:
        super().__init__(root, read_only=read_only)
        self.disk = disk or Disk()
        self._unsynced: set[Path] = set()

    async def set(self, key: str, value: Buffer) -> None:
        """Write one key durably."""
        path = self.root / key  # in the one thread of Zarr's event loop, so the set needs no lock
        self._unsynced.update(folder for folder in path.parents if folder.is_relative_to(self.root))
        self._unsynced.add(self.root.parent)
        path.parent.mkdir(parents=True, exist_ok=True)
        write_durably(self.disk, path, memoryview(value.as_buffer_like()))

    def sync(self) -> None:
        """Make the names of everything written since the last call durable, deepest folder first."""
        for folder in sorted(self._unsynced, key=lambda path: -len(path.parts)):
            self.disk.sync_dir(folder)
        self._unsynced.clear()


def create_zarr(folder: Path, meta: Mapping[str, Any], itinerary: Itinerary, disk: Disk) -> None:
    """Write the Zarr group of a new run: its attributes, the planned itinerary, and arrays without rows."""
    store = DurableStore(folder / ZARR, disk)
    root = zarr.create_group(store, attributes=dict(meta))
    for column in columns(meta):
        add_array(root, column, int(meta["chunk"]))
    if meta.get("list_mode"):
        add_array(root, events(meta), int(meta["list_mode"]["chunk"]))
    group = root.create_group(ITINERARY)
    for column in planned(int(meta["slits"]), itinerary.signs):
        name = column.name.removeprefix("sign_")
        values = itinerary.signs[name] if name != column.name else getattr(itinerary, name)
        whole = np.asarray(values).astype(column.kind)
        add_array(group, column, max(1, len(whole)), len(whole))[:] = whole
    store.sync()


def add_array(group: zarr.Group, column: Column, chunk: int, length: int = 0) -> zarr.Array[Any]:
    """Return a new array of a group: core codecs, checksum on every chunk, unit and names."""
    return group.create_array(
        column.name,
        shape=(length, *column.shape),
        chunks=(chunk, *column.shape),
        dtype=column.kind,
        fill_value=column.fill,
        compressors=[_EVENT_CODEC if column.name == EVENTS else _ROW_CODEC, Crc32cCodec()],
        dimension_names=column.dims,
        attributes={"units": column.units, "long_name": column.long_name, **column.attributes},
        config=_CONFIG,
        overwrite=True,
    )


def open_root(folder: Path, disk: Disk) -> zarr.Group:
    """Return the Zarr group of a run for writing; consolidated metadata count only when it is finished."""
    return zarr.open_group(DurableStore(folder / ZARR, disk), mode="r+", use_consolidated=False)


def open_array(folder: Path, name: str) -> zarr.Array[Any]:
    """Return one array of a run for reading, whatever became of the others."""
    return zarr.open_array(LocalStore(folder / ZARR, read_only=True), path=name, mode="r")


def write_rows(
    root: zarr.Group, names: Iterable[str], first: int, arrays: Mapping[str, NDArray[Any]], *, grow: int = 1
) -> None:
    """Write rows from `first` (the start of a chunk) on, and make them durable; lengths grow in steps."""
    for name in names:
        array, rows = root[name], arrays[name]
        assert isinstance(array, zarr.Array)
        stop = first + len(rows)
        if array.shape[0] < stop:
            array.resize((-(-stop // grow) * grow, *array.shape[1:]))
        array.with_config(_CONFIG)[first:stop] = rows
    store = root.store
    assert isinstance(store, DurableStore)
    store.disk.step("chunks")
    store.sync()
    store.disk.step("synced")
