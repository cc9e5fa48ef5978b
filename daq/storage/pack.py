"""Packing a finished run: a bag (RFC 8493) for the long term, or one zip that Zarr opens."""

from __future__ import annotations

import json
import shutil
import zipfile
from collections.abc import Mapping
from importlib.resources import files
from pathlib import Path
from typing import Any

import bagit

from daq.errors import StorageError
from daq.storage.export import write_csv
from daq.storage.layout import FINISHED, ZARR
from daq.storage.reader import read_meta
from daq.storage.trouble import rim

UNKNOWN = ":unkn"  # DataCite's word for a value that nobody knows


def pack_bag(folder: Path, target: Path, report: str) -> None:
    """Write a bag: the run folder as it is, report.txt, visits.csv, settings.json, datacite.json, README.txt.

    Raises
    ------
    StorageError
        When the run is not finished, or the target exists already.
    """
    meta = _finished(folder, target)
    passing = target.with_name(f"{target.name}.partial")
    with rim(target):
        shutil.rmtree(passing, ignore_errors=True)
        shutil.copytree(folder, passing / folder.name)
        write_csv(folder, passing / "visits.csv")
        (passing / "report.txt").write_text(report, "utf-8")
        _write_json(passing / "settings.json", meta)
        _write_json(passing / "datacite.json", _datacite(folder, meta))
        (passing / "README.txt").write_text(_readme(folder, meta), "utf-8")
        bagit.make_bag(str(passing), _bag_info(folder, meta), checksums=["sha512"])
        passing.replace(target)


def bag_problems(bag: Path) -> list[str]:
    """Return what is damaged, missing or added in a bag, one sentence each; nothing for a whole bag."""
    try:
        bagit.Bag(str(bag)).validate()
    except bagit.BagValidationError as error:
        return [str(detail) for detail in error.details] or [str(error)]
    except (bagit.BagError, OSError) as error:
        raise StorageError(f"this is no bag ({error})", where=str(bag)) from error
    return []


def pack_zip(folder: Path, target: Path) -> None:
    """Write the Zarr group of a run as one zip, not compressed again, that `zarr.storage.ZipStore` opens."""
    _finished(folder, target)
    passing = target.with_name(f"{target.name}.partial")
    with rim(target):
        with zipfile.ZipFile(passing, "w", zipfile.ZIP_STORED, allowZip64=True) as bundle:
            for path in sorted(path for path in (folder / ZARR).rglob("*") if path.is_file()):
                bundle.write(path, path.relative_to(folder / ZARR).as_posix())
        passing.replace(target)


def _finished(folder: Path, target: Path) -> dict[str, Any]:
    meta = read_meta(folder)
    if not meta.get(FINISHED):
        raise StorageError("the run is not finished", where=str(folder), remedy="Go on with it, then pack it")
    if target.exists():
        raise StorageError("it exists already", where=str(target), remedy="Choose another name, or remove it")
    return meta


def _write_json(path: Path, value: Mapping[str, Any]) -> None:
    path.write_text(json.dumps(value, indent=1, ensure_ascii=False) + "\n", "utf-8")


def _bag_info(folder: Path, meta: Mapping[str, Any]) -> dict[str, str]:
    notes = meta.get("notes", {})
    return {
        "Source-Organization": str(notes.get("organisation", UNKNOWN)),
        "Contact-Name": str(notes.get("contact", UNKNOWN)),
        "External-Description": str(meta.get("title", folder.name)),
        "External-Identifier": str(meta.get("id", folder.name)),
    }


def _datacite(folder: Path, meta: Mapping[str, Any]) -> dict[str, Any]:
    """Return the record of DataCite's six required properties; what nobody wrote down is marked unknown."""
    notes, started = meta.get("notes", {}), str(meta.get("started_utc", ""))
    return {
        "identifiers": [{"identifier": str(meta.get("id", folder.name)), "identifierType": "Other"}],
        "creators": [{"name": name} for name in _names(notes.get("creators"))],
        "titles": [{"title": str(meta.get("title", folder.name))}],
        "publisher": {"name": str(notes.get("organisation", UNKNOWN))},
        "publicationYear": started[:4] or UNKNOWN,
        "types": {
            "resourceTypeGeneral": "Dataset",
            "resourceType": f"interference measurement ({meta['kind']})",
        },
        "dates": [{"date": started, "dateType": "Collected"}] if started else [],
        "formats": ["Zarr v3", "text/csv"],
        "version": str(meta["format"]),
        "schemaVersion": "http://datacite.org/schema/kernel-4",
    }


def _names(written: Any) -> list[str]:
    if isinstance(written, str):
        return [written]
    return [str(name) for name in written or [UNKNOWN]]


def _readme(folder: Path, meta: Mapping[str, Any]) -> str:
    text = files("daq.storage").joinpath("README-bag.txt").read_text("utf-8")
    return text.replace("{title}", str(meta.get("title", folder.name))).replace("{run}", folder.name)
