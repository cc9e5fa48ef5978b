"""Verification: is every part of a run what it was when it was written, and what is still good if not."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from daq.estimate.blinding import OPEN, Blinding
from daq.estimate.dataset import HIDDEN, estimate_run
from daq.openings import name as opening_name
from daq.storage.chunks import lost_chunks
from daq.storage.digest import digest, gate_digest
from daq.storage.layout import ITINERARY, ZARR, columns, events, planned
from daq.storage.manifest import changed_files
from daq.storage.reader import open_itinerary, open_visits
from daq.storage.salvage import Problems, salvaged
from daq.storage.snapshot import JOURNAL, Snapshot, newest_rows
from daq.storage.texts import changed_texts
from daq.storage.trouble import LIBRARY_ERRORS

KAPPA_TOLERANCE = 1e-12  # the same estimate of the same numbers: rounding at most


@dataclass(frozen=True, slots=True)
class Verified:
    """What was found: `visits` of `rows` are whole; one sentence a problem, and what is good despite them."""

    rows: int
    visits: int
    problems: tuple[str, ...]
    good: tuple[str, ...] = ()

    @property
    def ok(self) -> bool:
        """Whether nothing was found."""
        return not self.problems


def verify(folder: Path) -> Verified:
    """Return what is damaged in a run, finished or not, and what is still good.

    Raises
    ------
    StorageError
        When there is no run to verify, or nowhere in its folder stands what it is.
    """
    folder = Path(folder)
    held, problems = salvaged(folder)
    finished = not (folder / JOURNAL).exists()
    whole, lost = _whole_rows(folder, held.meta, held.sealed)
    problems |= lost | _lost_plan(folder, held.meta)
    problems |= _lost_events(folder, held.meta, None if finished else held.events_sealed)
    if finished:
        problems |= _changed_since_finish(folder, problems)
    changed = changed_texts(folder, held.meta["texts_sha256"])
    problems |= {name: f"{name} is no longer what was written" for name in changed}
    good = tuple(_still_good(held, whole, problems)) if problems else ()
    if not problems:
        problems = dict(_contradictions(open_visits(folder), open_itinerary(folder)))
    rows = len(whole) + len(held.rows)
    return Verified(
        max(rows, newest_rows(folder)), int(whole.sum()) + len(held.rows), tuple(problems.values()), good
    )


def _still_good(held: Snapshot, whole: NDArray[np.bool_], problems: Problems) -> Iterator[str]:
    """Yield what a damaged run still has."""
    if whole.any():
        edges = np.flatnonzero(np.diff(whole.astype(int), prepend=0, append=0))
        spans = [f"{first} to {stop - 1}" for first, stop in edges.reshape(-1, 2).tolist()]
        yield f"rows {', '.join(spans)} of the Zarr group are whole"
    if held.rows:
        yield f"{len(held.rows)} rows of the journal are whole"
    if not any(name.startswith(f"{ZARR}/{ITINERARY}/") for name in problems):
        yield "what was planned is whole"
    texts = [name for name in held.meta["texts_sha256"] if name not in problems]
    if texts:
        yield f"the copies {', '.join(texts)} are what was written"


def _whole_rows(folder: Path, meta: dict[str, Any], rows: int) -> tuple[NDArray[np.bool_], Problems]:
    """Return which sealed rows are whole in every column, and what is wrong with the others."""
    whole, problems = np.ones(rows, bool), Problems()
    for column in columns(meta):
        for lost in lost_chunks(folder, column, rows):
            whole[lost.rows] = False
            problems[lost.file] = lost.what
    return whole, problems


def _lost_plan(folder: Path, meta: dict[str, Any]) -> Problems:
    table = planned(int(meta["slits"]), meta["signs"])
    return {
        lost.file: lost.what
        for column in table
        for lost in lost_chunks(folder, column, group=f"{ITINERARY}/")
    }


def _lost_events(folder: Path, meta: dict[str, Any], sealed: int | None) -> Problems:
    """Return what is wrong with the events of list mode; the counts of their visits are not touched by it."""
    if not meta.get("list_mode"):
        return {}
    return {lost.file: lost.what for lost in lost_chunks(folder, events(meta), sealed)}


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


def _contradictions(dataset: xr.Dataset, itinerary: xr.Dataset) -> Iterator[tuple[str, str]]:
    """Yield what does not fit together although every part can be read."""
    yield from _against_itinerary(dataset, itinerary)
    for name, found in (("digest", digest), ("gate_digest", gate_digest)):
        if dataset.attrs.get(name, (value := found(dataset))) != value:
            yield name, f"the {name} of the visits is not the one written when the run was finished"
    if "kappa" in (results := dataset.attrs.get("results", {})):
        yield from _against_results(dataset, results)


def _against_results(dataset: xr.Dataset, results: dict[str, Any]) -> Iterator[tuple[str, str]]:
    """Yield whether kappa is not what was written, hidden as it was then; no number while it is hidden."""
    hidden: Blinding = dataset.attrs.get(HIDDEN, Blinding())
    as_then = Blinding(str(results.get("blinding", OPEN)), hidden.offsets)
    if as_then.hides and not hidden.offsets:
        return  # the secret is not at hand
    now, then = estimate_run(dataset.assign_attrs({HIDDEN: as_then})).kappa, results["kappa"]
    if now != then and (now is None or then is None or abs(now - then) > KAPPA_TOLERANCE):
        both = "not what it was" if hidden.hides else f"{now} now, and was {then}"
        yield "kappa", f"kappa is {both} when the run was finished"


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
