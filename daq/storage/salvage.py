"""Salvage: what is still good of a damaged run, and one sentence for everything that is not."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import zarr
from zarr.storage import LocalStore

from daq.errors import StorageError
from daq.storage.absent import ROOT, no_run
from daq.storage.layout import FINISHED, RECORD, ZARR, columns
from daq.storage.manifest import MANIFEST
from daq.storage.seal import open_array
from daq.storage.snapshot import JOURNAL, Snapshot, check_format, good_rows, snapshot
from daq.storage.trouble import LIBRARY_ERRORS

Problems = dict[str, str]  # file, or what else is wrong -> sentence without its stop


def salvaged(folder: Path) -> tuple[Snapshot, Problems]:
    """Return what a run holds, `sealed` rows in its Zarr group, and what is wrong outside its chunks.

    Raises
    ------
    StorageError
        When there is no run, or nowhere in the folder stands any more what it is.
    """
    problems: Problems = {}
    if (folder / JOURNAL).exists():
        held, problems = _journal(folder)
        if held is not None:
            return held, problems
    meta, found = _meta(folder)
    check_format(meta, folder)
    sealed = _longest(folder, meta)
    if problems:
        problems[JOURNAL] += f"; the {sealed} visits sealed before it are not touched by this"
    elif not meta.get(FINISHED):
        if not sealed:
            raise no_run(folder)
        found[JOURNAL] = f"{JOURNAL} is missing, and with it every visit that was not sealed"
    return Snapshot(meta, sealed, []), problems | found


def root_meta(folder: Path) -> dict[str, Any]:
    """Return the attributes of a run's Zarr group; raises one of `LIBRARY_ERRORS`."""
    store = LocalStore(folder / ZARR, read_only=True)
    return dict(zarr.open_group(store, mode="r", use_consolidated=False).attrs.asdict())


def _journal(folder: Path) -> tuple[Snapshot | None, Problems]:
    try:
        return snapshot(folder), {}
    except StorageError as error:
        return good_rows(folder), {JOURNAL: f"{JOURNAL}: {error.what}"}


def _meta(folder: Path) -> tuple[dict[str, Any], Problems]:
    """Return what the run is, from the second place where the first is lost."""
    try:
        return root_meta(folder), {}
    except LIBRARY_ERRORS:
        how = "damaged" if (folder / ROOT).exists() else "missing"
    try:
        meta = json.loads((folder / RECORD).read_bytes())
    except (OSError, ValueError):
        raise no_run(folder) from None
    finished = {FINISHED: True} if (folder / MANIFEST).exists() else {}
    words = f"{ROOT} is {how}: the results of the run are lost; what it is stands in {RECORD} too"
    return {**meta, **finished}, {ROOT: words}


def _longest(folder: Path, meta: dict[str, Any]) -> int:
    lengths = [0]
    for column in columns(meta):
        try:
            lengths.append(open_array(folder, column.name).shape[0])
        except LIBRARY_ERRORS:
            continue  # named with its chunks
    return max(lengths)
