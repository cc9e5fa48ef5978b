"""Copying what was packed to a folder or an object store by address, read back and compared."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from importlib.util import find_spec
from pathlib import Path
from typing import Any

from daq.errors import StorageError
from daq.storage.trouble import rim


def copy_to(packed: Path, address: str) -> int:
    """Copy a packed run to an address and return how many files were copied; each is read back and compared.

    Parameters
    ----------
    packed
        A bag (folder) or a zip.
    address
        "file:///…", "s3://bucket/folder", … : whatever obstore opens; credentials come from the environment.

    Raises
    ------
    StorageError
        When the address cannot be opened or written, or a file does not come back as it was sent.
    """
    store = _store(address)
    import obstore

    files = list(_files(packed))
    for path, name in files:
        with rim(path):
            data = path.read_bytes()
        try:
            obstore.put(store, name, data)
            back = bytes(obstore.get(store, name).bytes())
        except (obstore.exceptions.BaseError, OSError) as error:
            raise _failed(f"{name} could not be copied ({_first_line(error)})", address) from error
        if hashlib.sha256(back).digest() != hashlib.sha256(data).digest():
            raise _failed(f"{name} does not come back as it was sent", address)
    return len(files)


def _files(packed: Path) -> Iterator[tuple[Path, str]]:
    if packed.is_file():
        yield packed, packed.name
        return
    for path in sorted(packed.rglob("*")):
        if path.is_file():
            yield path, f"{packed.name}/{path.relative_to(packed).as_posix()}"


def _store(address: str) -> Any:
    if find_spec("obstore") is None:
        raise StorageError(
            "copying to an address needs obstore", remedy="Install it: pip install 'tercet[scale]'"
        )
    import obstore
    from obstore.store import from_url

    try:
        return from_url(address, mkdir=True) if address.startswith("file://") else from_url(address)
    except (obstore.exceptions.BaseError, ValueError) as error:
        raise _failed(f"this address cannot be opened ({_first_line(error)})", address) from error


def _failed(what: str, address: str) -> StorageError:
    return StorageError(what, where=address, remedy="The packed run beside the run folder is untouched")


def _first_line(error: Exception) -> str:
    return str(error).strip().splitlines()[0]
