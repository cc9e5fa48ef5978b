"""The ledger of a study: draws by their number in one file, and beside it which blocks are done."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray

from daq.errors import StorageError
from daq.scale.job import Job
from daq.storage.trouble import rim

DRAWS, DONE = "draws.f64", "done.jsonl"
AT_ONCE = 4096  # draws read at once


class Ledger:
    """Holds the folder of one study; its memory does not grow with the number of draws.

    A block counts when its line stands in `done.jsonl`; its bytes are durable before, and compared by their
    SHA-256 when the study goes on.
    """

    def __init__(self, folder: Path, job: Job) -> None:
        self._folder, self._job = folder, job
        with rim(folder):
            folder.mkdir(parents=True, exist_ok=True)
            self._data = os.open(folder / DRAWS, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
            self._done = os.open(folder / DONE, os.O_RDWR | os.O_CREAT | os.O_APPEND | os.O_CLOEXEC, 0o644)
        self._begun = False  # whose the folder is stands in it from the first block on
        self.ranges: list[tuple[int, int]] = []  # done, [first, past), ascending, none touching another
        try:
            self._read()
        except BaseException:
            self.close()
            raise

    @property
    def done(self) -> int:
        """How many of the draws wanted are done."""
        return sum(max(0, min(past, self._job.draws) - first) for first, past in self.ranges)

    def missing(self, block: int) -> Iterator[tuple[int, int]]:
        """Yield (first, count) of what is to be drawn yet, in blocks of at most so many."""
        at = 0
        for first, past in [*self.ranges, (self._job.draws, self._job.draws)]:
            stop = min(first, self._job.draws)
            for begin in range(at, stop, block):
                yield begin, min(block, stop - begin)
            at = max(at, past)

    def put(self, first: int, data: bytes) -> None:
        """Keep a block for good."""
        size = self._job.draw_bytes
        line = {"first": first, "count": len(data) // size, "sha256": hashlib.sha256(data).hexdigest()}
        with rim(self._folder):
            if not self._begun:
                os.write(self._done, json.dumps({"job": self._job.key}).encode() + b"\n")
                self._begun = True
            os.pwrite(self._data, data, first * size)
            os.fdatasync(self._data)
            os.write(self._done, json.dumps(line).encode() + b"\n")
        self._note(first, len(data) // size)

    def tables(self) -> Iterator[NDArray[np.float64]]:
        """Yield the draws in their order, (draws, rows, columns), some at once."""
        shape = (-1, self._job.rows, len(self._job.columns))
        for first in range(0, self._job.draws, AT_ONCE):
            yield np.frombuffer(self._bytes(first, min(AT_ONCE, self._job.draws - first)), "<f8").reshape(
                shape
            )

    def digest(self) -> str:
        """Return the SHA-256 of all draws in their order: the same however they were obtained."""
        whole = hashlib.sha256()
        for table in self.tables():
            whole.update(table.tobytes())
        return whole.hexdigest()

    def close(self) -> None:
        """Let the files go."""
        os.close(self._data)
        os.close(self._done)

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def _read(self) -> None:
        """Take in what an earlier start has done: same job only, and bytes that are what they were."""
        with rim(self._folder):
            lines = (self._folder / DONE).read_bytes().split(b"\n")
            size = os.fstat(self._done).st_size
        if size and lines[-1]:
            os.write(self._done, b"\n")  # close off what a crash tore
        entries = [entry for line in lines if (entry := _entry(line)) is not None]
        if not entries:
            return
        self._begun = True
        if entries[0].get("job") != self._job.key:
            raise StorageError(
                "this folder holds another study: its parameters, its seed or the program's version differ",
                where=str(self._folder),
                remedy="Choose another folder with --into, or remove this one",
            )
        for entry in entries[1:]:
            first, count = int(entry["first"]), int(entry["count"])
            if hashlib.sha256(self._bytes(first, count)).hexdigest() == entry["sha256"]:
                self._note(first, count)

    def _bytes(self, first: int, count: int) -> bytes:
        size = self._job.draw_bytes
        return os.pread(self._data, count * size, first * size)

    def _note(self, first: int, count: int) -> None:
        merged = [(first, first + count)]
        for begin, past in sorted([*self.ranges, merged.pop()]):
            if merged and begin <= merged[-1][1]:
                merged[-1] = merged[-1][0], max(past, merged[-1][1])
            else:
                merged.append((begin, past))
        self.ranges = merged


def _entry(line: bytes) -> dict[str, Any] | None:
    try:
        found = json.loads(line)
    except ValueError:
        return None
    return found if isinstance(found, dict) and ("job" in found or "sha256" in found) else None
