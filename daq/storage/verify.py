"""Verification: is every part of a run what it was when it was written, and what is still good if not."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
import zarr
from numpy.typing import NDArray

from daq.errors import StorageError
from daq.estimate.dataset import estimate_run
from daq.openings import name as opening_name
from daq.storage.digest import digest, gate_digest
from daq.storage.layout import EVENTS, columns, planned
from daq.storage.manifest import changed_files
from daq.storage.reader import open_itinerary, open_visits, read_meta
from daq.storage.seal import ITINERARY, ZARR, open_array
from daq.storage.snapshot import JOURNAL, Snapshot, salvaged, snapshot
from daq.storage.texts import changed_texts
from daq.storage.trouble import LIBRARY_ERRORS

KAPPA_TOLERANCE = 1e-12  # the same estimate of the same numbers: rounding at most
Problems = dict[str, str]  # file, or what else is wrong -> sentence


@dataclass(frozen=True, slots=True)
class Verified:
    """What was found: `visits` of `rows` are whole; one sentence a problem."""

    rows: int
    visits: int
    problems: tuple[str, ...]

    @property
    def ok(self) -> bool:
        """Whether nothing was found."""
        return not self.problems


def verify(folder: Path) -> Verified:
    """Return what is damaged in a run, finished or not, and how many visits are still whole.

    Raises
    ------
    StorageError
        When there is no run to verify, or not even its meta data can be read.
    """
    folder = Path(folder)
    if not (folder / JOURNAL).exists():
        meta, tail = read_meta(folder), 0
        good, problems = _whole_rows(folder, meta, _longest(folder, meta))
        problems.update(_lost_events(folder, meta, None))
        problems.update(_changed_since_finish(folder, problems))
    else:
        held, problems = _journal(folder)
        meta, tail = held.meta, len(held.rows)
        good, found = _whole_rows(folder, meta, held.sealed)
        problems.update(found)
        problems.update(_lost_events(folder, meta, held.events_sealed))
    problems.update({name: f"{name} is no longer what was written" for name in _changed_texts(folder, meta)})
    if not problems:
        problems = dict(_contradictions(open_visits(folder), open_itinerary(folder)))
    return Verified(len(good) + tail, int(good.sum()) + tail, tuple(problems.values()))


def _journal(folder: Path) -> tuple[Snapshot, Problems]:
    """Return the rows of the journal that are good, and what is wrong with it."""
    try:
        held = snapshot(folder)
        assert held is not None
        return held, {}
    except StorageError as error:
        found: Problems = {JOURNAL: str(error).rstrip(".")}
    held = salvaged(folder)
    if held is None:
        with_root = zarr.open_group(folder / ZARR, mode="r", use_consolidated=False)
        meta = dict(with_root.attrs.asdict())
        held = Snapshot(meta, _longest(folder, meta), [])
        found[JOURNAL] += f". The {held.sealed} visits sealed before it are not touched by this"
    return held, found


def _longest(folder: Path, meta: dict[str, Any]) -> int:
    lengths = [0]
    for column in columns(meta):
        try:
            lengths.append(open_array(folder, column.name).shape[0])
        except LIBRARY_ERRORS:
            continue  # named by _whole_rows
    return max(lengths)


def _whole_rows(folder: Path, meta: dict[str, Any], rows: int) -> tuple[NDArray[np.bool_], Problems]:
    """Return which sealed rows are whole in every column, and what is wrong with the others."""
    good, problems = np.ones(rows, bool), {}
    for column in columns(meta):
        for file, part, words in _bad_chunks(folder, column.name, rows):
            good[part] = False
            problems[file] = f"{file} {words}: {column.name} of rows {part.start} to {part.stop - 1} is lost"
    for column in planned(int(meta["slits"]), meta["signs"]):
        for file, _, words in _bad_chunks(folder, f"{ITINERARY}/{column.name}", None):
            problems[file] = f"{file} {words}: {column.name} of the planned visits is lost"
    return good, problems


def _lost_events(folder: Path, meta: dict[str, Any], sealed: int | None) -> Problems:
    """Return what is wrong with the events of list mode; the counts of their visits are not touched by it."""
    if not meta.get("list_mode"):
        return {}
    bad = _bad_chunks(folder, EVENTS, sealed)
    return {file: f"{file} {words}: events {at.start} to {at.stop - 1} are lost" for file, at, words in bad}


def _bad_chunks(folder: Path, name: str, rows: int | None) -> Iterator[tuple[str, slice, str]]:
    """Yield file, rows and what is wrong for every chunk of an array that cannot be read."""
    try:
        array = open_array(folder, name)
    except LIBRARY_ERRORS as error:
        yield f"{ZARR}/{name}/zarr.json", slice(0, rows or 0), f"cannot be read ({error})"
        return
    chunk, stop = array.chunks[0], array.shape[0] if rows is None else rows
    for number, first in enumerate(range(0, stop, chunk)):
        file = f"{ZARR}/{name}/c/{number}" + "/0" * (array.ndim - 1)
        part = slice(first, min(first + chunk, stop))
        if not (folder / file).exists() or array.shape[0] < part.stop:
            yield file, part, "is missing"
            continue
        try:
            array[part]
        except LIBRARY_ERRORS as error:
            yield file, part, f"is damaged ({error})"


def _changed_since_finish(folder: Path, known: Problems) -> Problems:
    try:
        changed = changed_files(folder)
    except LIBRARY_ERRORS as error:
        return {"manifest": f"the list of files cannot be read ({error})"}
    return {
        name: f"{name} is {how}; it was written when the run was finished"
        for name, how in changed.items()
        if name not in known
    }


def _changed_texts(folder: Path, meta: dict[str, Any]) -> list[str]:
    return changed_texts(folder, meta["texts_sha256"])


def _contradictions(dataset: xr.Dataset, itinerary: xr.Dataset) -> Iterator[tuple[str, str]]:
    """Yield what does not fit together although every part can be read."""
    yield from _against_itinerary(dataset, itinerary)
    for name, found in (("digest", digest), ("gate_digest", gate_digest)):
        if dataset.attrs.get(name, (value := found(dataset))) != value:
            yield name, f"the {name} of the visits is not the one written when the run was finished"
    if "kappa" in (results := dataset.attrs.get("results", {})):
        now, then = estimate_run(dataset).kappa, results["kappa"]
        if now != then and (now is None or then is None or abs(now - then) > KAPPA_TOLERANCE):
            yield "kappa", f"kappa is {now} now, and was {then} when the run was finished"


def _against_itinerary(dataset: xr.Dataset, itinerary: xr.Dataset) -> Iterator[tuple[str, str]]:
    visit = dataset["visit"].values
    if (visit >= itinerary.sizes["planned"]).any():
        yield "visit", f"visit {visit.max()} was made, and {itinerary.sizes['planned']} were planned"
        return
    rows = np.flatnonzero(visit >= 0)
    for name in ("opening", "position_mm", "dwell_s"):
        made, asked = dataset[name].values[rows], itinerary[name].values[visit[rows]]
        for at in np.flatnonzero(made != asked)[:1]:
            was, due = (_words(name, one[at]) for one in (made, asked))
            yield name, f"row {rows[at]} has {name} {was}, and {due} was planned"


def _words(name: str, value: float) -> str:
    return opening_name(int(value)) if name == "opening" else f"{value:g}"
