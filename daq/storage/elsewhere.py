"""A finished run wherever it lies: a run folder, a zip of one, or either at an address (obstore)."""

from __future__ import annotations

import io
import tempfile
import zipfile
from collections.abc import Iterator
from contextlib import contextmanager
from importlib.util import find_spec
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
import zarr
from zarr.storage import ObjectStore, ZipStore

from daq.errors import StorageError
from daq.estimate.blinding import OPEN
from daq.storage.blinding import blinding_of
from daq.storage.digest import digest
from daq.storage.layout import FINISHED, columns, looked_up
from daq.storage.reader import dataset_of, open_visits, read_meta
from daq.storage.snapshot import check_format
from daq.storage.trouble import rim

ADDRESS = "://"
ROOT = "zarr.json"


def open_finished(where: str) -> xr.Dataset:
    """Return all visits of a finished run, compared with the digest that it was finished with.

    Parameters
    ----------
    where
        A run folder, a `.zip` that `tercet pack --zip` wrote, or the address of a zip or of a Zarr group
        ("s3://bucket/run.zip", "file:///..."); credentials come from the environment.

    Raises
    ------
    StorageError
        When there is none, it is not finished, or its counts are not what they were.
    """
    if _elsewhere(where):
        with _group(where) as group:
            dataset = _read(group, where)
    else:
        dataset = open_visits(Path(where))
    if not dataset.attrs.get(FINISHED):
        raise StorageError("the run is not finished", where=where, remedy="Go on with it first")
    if digest(dataset) != dataset.attrs.get("digest"):
        raise StorageError(
            "the counts are not those that the run was finished with",
            where=where,
            remedy="`tercet verify` names the damage where the run folder is",
        )
    return dataset


def facts_of(where: str) -> dict[str, Any]:
    """Return the meta data of a finished run and its digest, and read no visit.

    Raises
    ------
    StorageError
        When there is none, or it is not finished.
    """
    if _elsewhere(where):
        with _group(where, whole=False) as group:
            facts = dict(group.attrs.asdict())
        state = facts.get("blinding", OPEN)
    else:
        facts = read_meta(Path(where))
        state = blinding_of(Path(where), facts).state
    if not facts.get(FINISHED):
        raise StorageError("the run is not finished", where=where, remedy="Go on with it first")
    return {**facts, "blinding": state}


def _elsewhere(where: str) -> bool:
    return ADDRESS in where or where.endswith(".zip")


@contextmanager
def _group(where: str, whole: bool = True) -> Iterator[zarr.Group]:
    """Give the Zarr group of a run that is no folder of this computer; unless `whole`, its attributes."""
    if ADDRESS not in where:
        with _zipped(Path(where)) as group:
            yield group
    elif where.endswith(".zip"):
        with tempfile.TemporaryDirectory() as folder:
            path = Path(folder) / "run.zip"
            path.write_bytes(_fetched(where) if whole else _without_chunks(where))
            with _zipped(path, where) as group:
                yield group
    else:
        store = ObjectStore(_store(where), read_only=True)
        yield _opened(store, where)


@contextmanager
def _zipped(path: Path, where: str = "") -> Iterator[zarr.Group]:
    if not path.exists():
        raise StorageError("there is no such run", where=where or str(path), remedy="Check the path")
    if not zipfile.is_zipfile(path):
        raise StorageError("this is no whole zip", where=where or str(path), remedy="Take another copy of it")
    with rim(where or path), ZipStore(path, mode="r") as store:
        yield _opened(store, where or str(path))


def _opened(store: Any, where: str) -> zarr.Group:
    try:
        return zarr.open_group(store, mode="r")
    except FileNotFoundError as error:
        raise StorageError("there is no such run", where=where, remedy="Check the address") from error
    except Exception as error:  # whatever a store raises
        raise StorageError(f"no run can be read here ({_first_line(error)})", where=where) from error


def _read(group: zarr.Group, where: str) -> xr.Dataset:
    meta = dict(group.attrs.asdict())
    check_format(meta, Path(where))
    table = (*columns(meta), *looked_up())
    try:
        arrays = {column.name: np.asarray(group[column.name][:]) for column in table}  # type: ignore[index]
    except Exception as error:  # whatever a codec or a store raises for a part that is damaged
        raise StorageError(
            f"a part of the run is missing or damaged ({_first_line(error)})",
            where=where,
            remedy="Take another copy of it",
        ) from error
    return dataset_of(table, arrays, meta)


def _fetched(where: str) -> bytes:
    base, _, name = where.rpartition("/")
    store = _store(base)
    import obstore

    try:
        return bytes(obstore.get(store, name).bytes())
    except FileNotFoundError as error:
        raise StorageError("there is no such run", where=where, remedy="Check the address") from error
    except (obstore.exceptions.BaseError, OSError) as error:
        raise StorageError(
            f"the run cannot be fetched ({_first_line(error)})",
            where=where,
            remedy="Check address and network",
        ) from error


def _without_chunks(where: str) -> bytes:
    """Return a zip with the root of the zip at an address alone: little is fetched of a large run."""
    import obstore

    base, _, name = where.rpartition("/")
    small = io.BytesIO()
    try:
        reader = io.BufferedReader(_Remote(obstore.open_reader(_store(base), name)))
        with zipfile.ZipFile(reader) as there, zipfile.ZipFile(small, "w") as here:
            here.writestr(ROOT, there.read(ROOT))
    except (obstore.exceptions.BaseError, OSError, KeyError, zipfile.BadZipFile) as error:
        raise StorageError(f"no run can be read here ({_first_line(error)})", where=where) from error
    return small.getvalue()


class _Remote(io.RawIOBase):
    """A file in a store, read part by part."""

    def __init__(self, reader: Any) -> None:
        self._reader = reader

    def readable(self) -> bool:
        """Return that it can be read."""
        return True

    def seekable(self) -> bool:
        """Return that any part of it can be."""
        return True

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        """Return the place that was gone to."""
        return int(self._reader.seek(offset, whence))

    def tell(self) -> int:
        """Return the place."""
        return int(self._reader.tell())

    def readinto(self, buffer: Any) -> int:
        """Return how many bytes were read."""
        found = memoryview(self._reader.read(len(buffer)))
        buffer[: len(found)] = found
        return len(found)


def _store(address: str) -> Any:
    if find_spec("obstore") is None:
        raise StorageError(
            "reading from an address needs obstore", remedy="Install it: pip install 'tercet[scale]'"
        )
    import obstore
    from obstore.store import from_url

    try:
        return from_url(address)
    except (obstore.exceptions.BaseError, ValueError, OSError) as error:
        raise StorageError(f"this address cannot be opened ({_first_line(error)})", where=address) from error


def _first_line(error: Exception) -> str:
    return (str(error).strip() or type(error).__name__).splitlines()[0]
