"""The beginning of a run's folder: copies, an empty Zarr group, and last the journal: then it is whole."""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from daq.errors import StorageError
from daq.storage.disk import Disk, write_durably
from daq.storage.journal import create_journal
from daq.storage.layout import FORMAT, RECORD, ZARR, list_mode
from daq.storage.rows import Rows
from daq.storage.seal import create_zarr
from daq.storage.snapshot import JOURNAL
from daq.storage.texts import write_texts
from daq.storage.trouble import rim

if TYPE_CHECKING:
    from daq.itinerary.compose import Itinerary


def write_beginning(
    folder: Path, texts: Mapping[str, bytes], itinerary: Itinerary, meta: Mapping[str, Any], disk: Disk
) -> None:
    """Write everything that a run has before its first visit; until the journal is there, nothing counts."""
    with rim(folder):
        _refuse_second(folder)
        whole = plain(
            {
                **{name: getattr(itinerary, name) for name in ("positions_mm", "weights", "signs")},
                **meta,
                **list_mode(meta, float(itinerary.dwell_s.max())),
                "format": FORMAT,
                "texts_sha256": write_texts(folder, texts, disk),
            }
        )
        write_durably(disk, folder / RECORD, json.dumps(whole, indent=1).encode())
        create_zarr(folder, whole, itinerary, disk)
        create_journal(folder, Rows(whole), whole)
        disk.sync_dir(folder)
        disk.sync_dir(folder.parent)


def plain(meta: Mapping[str, Any]) -> dict[str, Any]:
    """Return a mapping as plain JSON values; numbers of numpy become numbers, and NaN is refused."""
    done: dict[str, Any] = json.loads(json.dumps(dict(meta), default=_plain_value, allow_nan=False))
    return done


def _plain_value(value: Any) -> Any:
    return value.tolist() if hasattr(value, "tolist") else str(value)


def _refuse_second(folder: Path) -> None:
    if (folder / JOURNAL).exists() or (folder / ZARR).exists():
        raise StorageError(
            "the folder holds a run already", where=str(folder), remedy="Choose another folder"
        )
