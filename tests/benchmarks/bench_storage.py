"""Benchmarks of the archive: `python -m tests.benchmarks.bench_storage` prints a table of ratios.

Names of functions after it print those alone; `TMPDIR` says on which disk. The yardstick is timed in the same
process, in shuffled interleaved rounds: append 512 bytes to a file and fdatasync, the least that a durable
visit can cost. Times of a shared machine mean little; ratios say more.
"""

from __future__ import annotations

import os
import random
import shutil
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import suppress
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
from daq.storage.verify import verify
from tests.daq.storage.example import reading, started

ROUNDS, EACH = 40, 50
GROWING = (1_000, 10_000, 100_000, 1_000_000)
FIGURES = (
    *("commit_cost", "seal_cost", "commit_beside_seal", "reopening"),
    *("journal_size", "list_mode", "reading_many"),
)
POOL = [reading(visit) for visit in range(2400)]


def main() -> None:
    """Print every figure, or those of the functions named, on the disk of the temporary folder."""
    lab = Path(tempfile.mkdtemp())
    try:
        for name in sys.argv[1:] or FIGURES:
            print(f"--- {name.replace('_', ' ')}", flush=True)
            for line in globals()[name](lab / name):
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


def commit_beside_seal(folder: Path) -> Iterator[str]:
    """Yield what commits cost while chunks are sealed in the background, beside those without and a probe."""
    took: dict[str, list[float]] = {"without": [], "during": [], "probe": []}
    with started(folder, laps=200) as archive, (folder / "yardstick").open("wb") as file:
        commit, probe = _committer(archive), _appender(file.fileno())
        for number in range(8 * CHUNK):
            before = archive.journal.rows - archive.sealed >= CHUNK
            one = _timed(commit)
            sealing = before and archive.journal.rows - archive.sealed >= CHUNK
            took["during" if sealing else "without"].append(one)
            if number % 8 == 0:
                took["probe"].append(_timed(probe))
    median = {name: float(np.median(times)) * 1e6 for name, times in took.items()}
    worst = {name: max(times) * 1e3 for name, times in took.items()}
    during = f"during a seal {median['during']:.0f} us ({len(took['during'])} commits)"
    yield f"commit median {median['without']:.0f} us, {during}"
    yield f"during / without {median['during'] / median['without']:.2f} (target 3)"
    yield (
        f"worst during a seal {worst['during']:.1f} ms, of the probe {worst['probe']:.1f} ms, "
        f"ratio {worst['during'] / worst['probe']:.2f} (target 3)"
    )


def journal_size(folder: Path) -> Iterator[str]:
    """Yield how large the journal and its write-ahead log grow over many chunks."""
    with started(folder, laps=200) as archive:
        commit, most = _committer(archive), 0
        for number in range(12 * CHUNK):
            commit()
            if number % 256 == 0:
                most = max(most, sum(path.stat().st_size for path in folder.glob(f"{JOURNAL}*")))
    yield f"journal with its log at most {most / CHUNK / 1e3:.2f} kB a row of a chunk (target 4)"


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
    """Yield how the time to open a reader, to read all and to verify grows with the sealed visits."""
    opens: list[float] = []
    verifies: list[float] = []
    with started(folder, laps=200, disk=_NoSync()) as archive:
        with suppress(TypeError):  # it gives no answer; only what is read afterwards is timed
            archive.journal.setting("synchronous = OFF")
        commit = _committer(archive)
        for visits in GROWING:
            while archive.rows < visits:
                commit()
            while archive.seal_next():
                pass
            opens.append(_seconds(partial(read_meta, folder), 9))
            begun = time.process_time()
            took = _seconds(partial(verify, folder), 1)
            verifies.append(time.process_time() - begun)
            whole = _seconds(partial(open_visits, folder), 1)
            each_us, files = verifies[-1] / visits * 1e6, _size(folder)[1]
            yield (
                f"{visits} visits: reader opens in {1e3 * opens[-1]:.1f} ms, reads all in {whole:.2f} s, "
                f"verify {took:.2f} s, CPU {verifies[-1]:.2f} s ({each_us:.1f} us a visit); "
                f"{files} files (target {24 * (visits // CHUNK) + 30})"
            )
    yield f"opens at {GROWING[-1]} / at {GROWING[0]}: {opens[-1] / opens[0]:.2f} (target 3)"
    per_visit = (verifies[-1] - verifies[0]) / (GROWING[-1] - GROWING[0])
    before = (verifies[-2] - verifies[0]) / (GROWING[-2] - GROWING[0])
    yield f"verify, CPU of a visit at {GROWING[-1]} / at {GROWING[-2]}: {per_visit / before:.2f} (linear: 1)"


def list_mode(folder: Path) -> Iterator[str]:
    """Yield what an event costs against writing the same 64-bit times raw, in interleaved visits."""
    for number, visits, targets in ((1_000_000, 20, (0.3, 2.0)), (20_000_000, 3, (0.8, 1.1))):
        run = folder / str(number)
        yield from _listed(run, number, visits, targets)
        shutil.rmtree(run)


def _listed(folder: Path, number: int, visits: int, targets: tuple[float, float]) -> Iterator[str]:
    gaps = np.ceil(np.random.default_rng(1).exponential(100.0, number))
    ticks = np.cumsum(gaps).astype("<u8").tobytes()
    del gaps
    store: list[float] = []
    raw: list[float] = []
    busy, written = 0.0, 0
    with started(folder, laps=200, tick_s=1e-9, event_chunk=1 << 20) as archive:
        with (folder / "raw").open("wb") as file:
            for visit in range(visits):
                before, begun = _written(), time.process_time()
                store.append(_timed(partial(archive.commit, replace(POOL[visit], events=ticks))))
                busy += time.process_time() - begun
                written += _written() - before
                raw.append(_timed(partial(_append, file.fileno(), ticks)))
        (folder / "raw").unlink()
        before = _written()
        archive.finish({})
        written += _written() - before
    events, share = number * visits, float(np.median(np.array(raw) / np.array(store)))
    bits = 8 * _size(folder / "run.zarr" / EVENTS)[0] / events
    speed, cpu = events / sum(store) / 1e6, busy / events * 1e9
    final = _size(folder / "run.zarr")[0]
    yield f"{number} events a visit: {speed:.0f} M events/s (target 40), {cpu:.1f} ns CPU each (target 15)"
    yield f"raw time / store time {share:.2f} (target {targets[0]}); {bits:.2f} bits an event (bound 8.09)"
    yield f"bytes written / final {written / final:.2f} (target {targets[1]})"


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
    return partial(_append, handle, bytes(512))


def _append(handle: int, block: bytes) -> None:
    done = 0
    while done < len(block):  # the system writes at most 2 GiB at once
        done += os.write(handle, memoryview(block)[done:])
    os.fdatasync(handle)


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


def _seconds(function: Callable[[], object], tries: int = 3) -> float:
    return float(np.median([_timed(function) for _ in range(tries)]))


def _timed(function: Callable[[], object]) -> float:
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


def _written() -> int:
    """Return how many bytes this process has handed to the system for writing (Linux)."""
    fields = dict(line.split(": ") for line in Path("/proc/self/io").read_text("ascii").splitlines())
    return int(fields["wchar"])


if __name__ == "__main__":
    main()
