"""A process that forks writers for the kill test: `python -m tests.daq.storage.writer CHUNK LAPS`.

For each run folder on standard input a child begins or goes on with the run; the pid, every acknowledged row
and the child's end come out as lines. Forked from here, a writer is at work in milliseconds.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

from daq.storage.run import open_run
from daq.storage.snapshot import JOURNAL
from tests.daq.storage.example import listed, reading, started


def tell(words: str) -> None:
    os.write(1, f"{words}\n".encode())


def write_for_ever(folder: Path, chunk: int, laps: int) -> None:
    make = listed if folder.name.endswith("-list") else reading
    if (folder / JOURNAL).exists():
        archive = open_run(folder)
    else:
        archive = started(folder, chunk=chunk, laps=laps, tick_s=1e-9 if make is listed else None)
    tell(f"rows {archive.rows}")
    for visit in range(archive.rows, 12 * laps):
        tell(f"rows {archive.commit(make(visit)) + 1}")


def main() -> None:
    chunk, laps = map(int, sys.argv[1:])
    while folder := sys.stdin.buffer.readline().decode().strip():
        if child := os.fork():
            tell(f"pid {child}")
            os.waitpid(child, 0)
            tell("dead 0")
            continue
        try:
            write_for_ever(Path(folder), chunk, laps)
        finally:
            os._exit(0)


if __name__ == "__main__":
    main()
