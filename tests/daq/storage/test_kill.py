"""A writer is killed with SIGKILL at a random instant; no visit that it was told is stored may be lost."""

from __future__ import annotations

import os
import select
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import suppress
from pathlib import Path
from time import monotonic
from typing import IO, Any

import numpy as np
import pytest
import xarray as xr

from daq.errors import StorageError
from daq.storage.events import read_events
from daq.storage.reader import open_visits
from daq.storage.run import open_run
from tests.daq.storage.example import expected, reading, ticks_of

CHUNK, LAPS = 128, 1000  # more than a writer on a fast disk gets through before it is killed
PATIENCE_S = 60.0


class Writers:
    """Starts writers, one after the other, and kills them."""

    def __init__(self) -> None:
        command = [sys.executable, "-m", "tests.daq.storage.writer", str(CHUNK), str(LAPS)]
        root = Path(__file__).parents[3]
        self.forker = subprocess.Popen(
            command, cwd=root, bufsize=0, stdin=subprocess.PIPE, stdout=subprocess.PIPE
        )

    def killed(self, folder: Path, seconds: float, *, at_work: bool) -> int | None:
        """Return the rows that a writer acknowledged before it was killed, None when it told nothing.

        The seconds count from the start of the process, or from when the writer is `at_work`.
        """
        self._input.write(f"{folder}\n".encode())
        _, pid = self._said(PATIENCE_S)
        rows = self._said(PATIENCE_S)[1] if at_work else None
        until = monotonic() + seconds
        while (left := until - monotonic()) > 0 and self._speaks(left):
            word, number = self._said(0)
            if word == "dead":
                return rows
            rows = number
        with suppress(ProcessLookupError):  # a fast disk has taken everything: this one came to its end
            os.kill(pid, signal.SIGKILL)
        while (line := self._said(PATIENCE_S))[0] != "dead":
            rows = line[1]
        return rows

    def close(self) -> None:
        self._input.close()
        self.forker.wait()
        self._output.close()

    @property
    def _input(self) -> IO[bytes]:
        assert self.forker.stdin is not None
        return self.forker.stdin

    @property
    def _output(self) -> IO[bytes]:
        assert self.forker.stdout is not None
        return self.forker.stdout

    def _speaks(self, seconds: float) -> bool:
        return bool(select.select([self._output], [], [], seconds)[0])

    def _said(self, seconds: float) -> tuple[str, int]:
        assert self._speaks(seconds), "the writer says nothing"
        word, number = self._output.readline().decode().split()
        return word, int(number)


@pytest.fixture
def writers() -> Iterator[Writers]:
    forker = Writers()
    yield forker
    forker.close()


def assert_holds(folder: Path, opened: Any, rows: int) -> None:
    if "event_start" in opened:
        for visit, ticks in enumerate(read_events(folder, range(rows))):
            np.testing.assert_array_equal(ticks, ticks_of(visit), err_msg=f"events of {visit}")
    for name, values in expected([reading(visit) for visit in range(rows)]).items():
        np.testing.assert_array_equal(np.asarray(opened[name]), values, err_msg=name)


def rows_found(folder: Path, told: int | None, rows_before: int) -> int | None:
    """Return how many rows a reader finds, each compared; None where the run was killed in the making."""
    acknowledged = rows_before if told is None else told
    try:
        dataset = open_visits(folder)
    except StorageError as error:
        assert told is None, error
        assert rows_before == 0, error
        return None
    rows = dataset.sizes["row"]
    assert rows in (acknowledged, acknowledged + 1)
    assert_holds(folder, dataset, rows)
    return rows


def assert_finishes(folder: Path, rows: int) -> None:
    with open_run(folder) as archive:
        archive.finish({})
    assert_holds(folder, xr.open_zarr(folder / "run.zarr", chunks=None), rows)
    assert not list(folder.glob("journal*"))
    assert not list(folder.rglob("*.partial"))


def kill_many(lab: Path, writers: Writers, kills: int, seed: int) -> tuple[int, int, int]:
    """Return runs finished, visits compared through plain Zarr, and kills while a folder was being made."""
    rng, run, rows, visits, unmade = np.random.default_rng(seed), 0, 0, 0, 0
    for kill in range(kills):
        folder = lab / (f"{run}-list" if run % 2 else str(run))
        told = writers.killed(folder, rng.uniform(0, 0.6), at_work=rng.random() < 0.9)
        found = rows_found(folder, told, rows)
        rows = found or 0
        if found is None or kill % 4 == 3:
            run, unmade = run + 1, unmade + (found is None)
            if found is not None:
                assert_finishes(folder, rows)
            visits, rows = visits + rows, 0
    return run - unmade, visits, unmade


def test_no_acknowledged_visit_is_lost_when_the_writer_is_killed(tmp_path: Path, writers: Writers) -> None:
    finished, visits, _ = kill_many(tmp_path, writers, kills=12, seed=4)

    assert finished >= 1
    assert visits > 0


@pytest.mark.long
@pytest.mark.timeout(3600)
def test_no_acknowledged_visit_is_lost_in_two_hundred_kills(tmp_path: Path, writers: Writers) -> None:
    finished, visits, unmade = kill_many(tmp_path, writers, kills=200, seed=5)

    print(f"{finished} runs, {visits} visits compared, {unmade} kills in the making")  # noqa: T201
    assert finished > 30
    assert visits > 1000
