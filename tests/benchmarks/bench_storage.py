"""Benchmarks of the archive: `python -m tests.benchmarks.bench_storage` prints a table of ratios.

The yardstick is timed in the same process, in shuffled interleaved rounds: append 512 bytes to a file and
fdatasync, the least that a durable visit can cost. Times of a shared machine mean little; ratios say more.
"""

from __future__ import annotations

import os
import random
import shutil
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import replace
from functools import partial
from itertools import count
from pathlib import Path

import numpy as np

from daq.records import Reading
from daq.storage.disk import Disk
from daq.storage.layout import CHUNK, EVENTS
from daq.storage.reader import open_visits, read_meta
from daq.storage.run import Archive, open_run
from daq.storage.snapshot import JOURNAL
from tests.daq.storage.example import reading, started

ROUNDS, EACH = 40, 50
POOL = [reading(visit) for visit in range(2400)]


def main() -> None:
    """Print every figure, on the disk of the folder given or of the temporary folder."""
    place = Path(sys.argv[1]) if len(sys.argv) > 1 else None
    lab = Path(tempfile.mkdtemp(dir=place))
    try:
        for figures in (commit_cost, seal_cost, reopening, reading_many, list_mode):
            for line in figures(lab / figures.__name__):
                print(line, flush=True)
    finally:
        shutil.rmtree(lab)


def commit_cost(folder: Path) -> Iterator[str]:
    """Yield the cost of a commit against the yardstick, with the write-ahead log warm."""
    with started(folder, laps=200, chunk=1 << 20) as archive, (folder / "yardstick").open("wb") as file:
        work = {"commit": _committer(archive), "append 512 B + fdatasync": _appender(file.fileno())}
        for _ in range(1200):
            work["commit"]()
        wall, cpu = _interleaved(work)
    yield from _against(wall, cpu, "commit", "append 512 B + fdatasync")


def seal_cost(folder: Path) -> Iterator[str]:
    """Yield what sealing costs a visit, beside its commit, and the bytes and files that a chunk takes."""
    with started(folder, laps=200, disk=Disk()) as archive:
        commit = _committer(archive)
        begun = time.process_time()
        for _ in range(CHUNK - 1):
            commit()
        committing = time.process_time() - begun
        before = _size(folder / "run.zarr")
        commit()
        begun = time.process_time()
        while archive.sealed < CHUNK:
            time.sleep(0.001)
        sealing = time.process_time() - begun
        size, files = (after - was for after, was in zip(_size(folder / "run.zarr"), before, strict=True))
    yield f"commit CPU {committing / CHUNK * 1e6:.0f} us, seal CPU {sealing / CHUNK * 1e6:.0f} us a visit"
    yield f"seal / commit CPU {sealing / committing:.2f} (target 0.6)"
    yield f"sealed {size / CHUNK:.0f} B a visit, {files} files a chunk (target 24)"


def reopening(folder: Path) -> Iterator[str]:
    """Yield the time to read and to go on with a run of 16 000 visits that are not sealed."""
    with started(folder, laps=200, chunk=1 << 20) as archive:
        commit = _committer(archive)
        for _ in range(16_000):
            commit()
        killed = folder.with_name("killed")
        shutil.copytree(folder, killed)
    yield f"open_visits of 16 000 unsealed {_seconds(lambda: open_visits(killed)):.3f} s"
    yield f"open_run of 16 000 unsealed {_seconds(lambda: open_run(killed).close()):.3f} s (target 0.2)"
    yield f"journal {(killed / JOURNAL).stat().st_size / 16_000:.0f} B a visit"


def reading_many(folder: Path) -> Iterator[str]:
    """Yield how the time to open a reader, and to verify, grows with the visits that are sealed."""
    times = []
    for visits in (1_000, 100_000):
        run = folder / str(visits)
        with started(run, laps=200, disk=_NoSync()) as archive:
            commit = _committer(archive)
            for _ in range(visits):
                commit()
            while archive.seal_next():
                pass
            times.append(_seconds(partial(read_meta, run)))
            whole = _seconds(partial(open_visits, run))
        yield f"{visits} visits: reader opens in {times[-1]:.4f} s, reads all in {whole:.3f} s"
    yield f"opens at 1e5 / at 1e3: {times[1] / times[0]:.2f} (target 3 at 1e6)"


def list_mode(folder: Path) -> Iterator[str]:
    """Yield what an event costs against writing the same 64-bit times raw, in interleaved visits."""
    number, visits = 1_000_000, 20
    draw = np.random.default_rng(1)
    gaps = draw.exponential(100.0, (4, number))
    ticks = [np.cumsum(np.ceil(one)).astype("<u8").tobytes() for one in gaps]
    with started(folder, laps=200, tick_s=1e-9, event_chunk=1 << 20) as archive:
        raw = (folder / "raw").open("wb")
        took = {"store": 0.0, "raw": 0.0}
        cpu = 0.0
        for visit in range(visits):
            begun, busy = time.perf_counter(), time.process_time()
            archive.commit(replace(POOL[visit], events=ticks[visit % 4]))
            took["store"] += time.perf_counter() - begun
            cpu += time.process_time() - busy
            begun = time.perf_counter()
            raw.write(ticks[visit % 4])
            raw.flush()
            os.fdatasync(raw.fileno())
            took["raw"] += time.perf_counter() - begun
        raw.close()
        (folder / "raw").unlink()
        archive.finish({})
    events = number * visits
    bits = 8 * _size(folder / "run.zarr" / EVENTS)[0] / events
    speed, share = events / took["store"] / 1e6, took["raw"] / took["store"]
    yield f"list mode {speed:.0f} M events/s (target 40), {cpu / events * 1e9:.1f} ns CPU each (target 15)"
    yield f"raw time / store time {share:.2f} (target 0.3); {bits:.2f} bits an event (bound 8.09)"


class _NoSync(Disk):
    """Writes without waiting for the disk: only what is read afterwards is timed."""

    def write(self, path: Path, data: bytes | memoryview) -> None:
        path.write_bytes(data)

    def sync_dir(self, folder: Path) -> None:
        pass


def _committer(archive: Archive) -> Callable[[], object]:
    number = count()

    def commit() -> object:
        return archive.commit(_reading(next(number)))

    return commit


def _reading(number: int) -> Reading:
    return POOL[number % len(POOL)]


def _appender(handle: int) -> Callable[[], object]:
    block = bytes(512)

    def append() -> object:
        os.write(handle, block)
        os.fdatasync(handle)
        return None

    return append


def _interleaved(
    work: dict[str, Callable[[], object]],
) -> tuple[dict[str, list[float]], dict[str, list[float]]]:
    wall: dict[str, list[float]] = {name: [] for name in work}
    cpu: dict[str, list[float]] = {name: [] for name in work}
    order = list(work) * ROUNDS
    random.Random(1).shuffle(order)
    for name in order:
        begun = time.process_time()
        for _ in range(EACH):
            start = time.perf_counter()
            work[name]()
            wall[name].append(time.perf_counter() - start)
        cpu[name].append((time.process_time() - begun) / EACH)
    return wall, cpu


def _against(
    wall: dict[str, list[float]], cpu: dict[str, list[float]], ours: str, probe: str
) -> Iterator[str]:
    for label, figures in (("wall", wall), ("CPU", cpu)):
        for q in (50, 99) if label == "wall" else (50,):
            mine, least = (float(np.percentile(figures[name], q)) * 1e6 for name in (ours, probe))
            yield f"{ours} {label} p{q}: {mine:.0f} us, {probe}: {least:.0f} us, ratio {mine / least:.2f}"


def _size(folder: Path) -> tuple[int, int]:
    files = [path for path in folder.rglob("*") if path.is_file()]
    return sum(path.stat().st_size for path in files), len(files)


def _seconds(function: Callable[[], object]) -> float:
    times = []
    for _ in range(3):
        start = time.perf_counter()
        function()
        times.append(time.perf_counter() - start)
    return sorted(times)[1]


if __name__ == "__main__":
    main()
