"""The power is cut between any two steps of the order of operations; every durable visit is still there."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr

from daq.errors import StorageError
from daq.storage.events import read_events
from daq.storage.reader import open_visits
from daq.storage.run import open_run
from tests.daq.storage.example import expected, listed, reading, started, ticks_of
from tests.daq.storage.fake_disk import Cut, FakeDisk, LateSync, LateWrite, NoFileSync, NoFolderSync

CHUNK = 16
DECISIVE = ("synced", "forgot", "rest", "unlinked")


def cuts_of(
    kind: type[FakeDisk],
    folder: Path,
    visits: int,
    cut_at: Callable[[str, int], bool],
    tick_s: float | None = None,
) -> list[Cut]:
    """Return the cuts made while a run is written, sealed and finished on a fake disk."""
    disk = kind(folder / "run", folder / "cuts", cut_at)
    with started(folder / "run", chunk=CHUNK, laps=10, disk=disk, tick_s=tick_s) as archive:
        disk.rows, disk.broken = (lambda: archive.rows), kind is not FakeDisk
        for visit in range(visits):
            archive.commit(listed(visit) if tick_s else reading(visit))
            if archive.rows % CHUNK == 0:
                assert disk.forgot.wait(60)
                disk.forgot.clear()
        archive.finish({})
    return disk.cuts


def differs(folder: Path, opened: Any, rows: int) -> str:
    if opened.sizes["row"] != rows:
        return f"{opened.sizes['row']} rows of {rows}"
    columns = expected([reading(visit) for visit in range(rows)])
    wrong = [
        name for name, values in columns.items() if not np.array_equal(opened[name], values, equal_nan=True)
    ]
    if "event_start" in opened:
        found = enumerate(read_events(folder, range(rows)))
        wrong += [f"events of {v}" for v, ticks in found if not np.array_equal(ticks, ticks_of(v))]
    return f"{', '.join(wrong)} differ" if wrong else ""


def damage(cut: Cut, *, finish: bool = False) -> str:
    """Return what is wrong with the folder that a cut left, "" for nothing."""
    try:
        found = differs(cut.folder, open_visits(cut.folder), cut.rows)
        if found or not finish:
            return found
        if (cut.folder / "journal.sqlite").exists():
            with open_run(cut.folder) as archive:
                archive.finish({})
        return differs(cut.folder, xr.open_zarr(cut.folder / "run.zarr", chunks=None), cut.rows)
    except StorageError as error:
        return str(error)


def test_after_a_cut_at_any_decisive_step_every_visit_is_there(tmp_path: Path) -> None:
    cuts = cuts_of(FakeDisk, tmp_path, 20, lambda step, number: step in DECISIVE or number in (14, 19))

    damaged = {f"{cut.step} {cut.mode}": found for cut in cuts if (found := damage(cut))}

    assert {cut.step for cut in cuts} == {*DECISIVE, "committed"}
    assert damaged == {}


def test_a_run_cut_off_in_the_middle_of_a_seal_is_gone_on_with_and_finished(tmp_path: Path) -> None:
    cuts = cuts_of(FakeDisk, tmp_path, 17, lambda step, _: step == "chunks")

    assert [damage(cut, finish=True) for cut in cuts[:3]] == ["", "", ""]


@pytest.mark.parametrize("mutant", [NoFileSync, NoFolderSync, LateSync, LateWrite])
def test_each_broken_rule_is_caught(tmp_path: Path, mutant: type[FakeDisk]) -> None:
    cuts = cuts_of(mutant, tmp_path, 17, lambda step, _: step == "forgot")

    assert any(damage(cut) for cut in cuts)


def test_events_that_leave_the_journal_before_their_chunk_is_durable_are_caught(tmp_path: Path) -> None:
    cuts = cuts_of(LateSync, tmp_path, 6, lambda step, _: step == "committed", tick_s=1e-9)

    assert any("events" in damage(cut) for cut in cuts)


def test_after_a_cut_in_list_mode_every_event_is_there(tmp_path: Path) -> None:
    cuts = cuts_of(FakeDisk, tmp_path, 6, lambda step, _: step in ("synced", "committed"), tick_s=1e-9)

    assert [damage(cut) for cut in cuts] == [""] * len(cuts)


@pytest.mark.long
@pytest.mark.timeout(3600)
@pytest.mark.parametrize(("visits", "tick_s"), [(66, None), (34, 1e-9)])
def test_after_a_cut_at_every_step_the_run_is_whole_and_can_be_finished(
    tmp_path: Path, visits: int, tick_s: float | None
) -> None:
    cuts = cuts_of(FakeDisk, tmp_path, visits, lambda _step, _number: True, tick_s)

    damaged = {f"{cut.step} {cut.mode}": found for cut in cuts if (found := damage(cut, finish=True))}

    print(f"{len(cuts)} cuts, {len(damaged)} damaged")  # noqa: T201
    assert len(cuts) >= 200
    assert damaged == {}
