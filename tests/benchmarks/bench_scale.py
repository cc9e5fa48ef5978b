"""Scale: how busy workers are kept, what a client holds, and how long many runs take to pool.

python -m tests.benchmarks.bench_scale [runs] [s3://bucket]

Efficiency: blocks of half a second that only wait, so that other programs on the cores cost little. Memory:
the most that a client holds for ten times the nights, over what it holds for once (Linux). Pooling: runs in
folders, zips and at addresses of a store, read and then kept; the yardstick is the folders, read in the same
process. A bucket is reached as AWS_ENDPOINT_URL and its fellows say.
"""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
import tempfile
import time
from pathlib import Path
from typing import Any

import obstore
import zarr
from obstore.store import from_url

from daq.scale.cluster import Cluster
from daq.scale.job import job_of
from daq.scale.kept import Kept
from daq.scale.pool import pool_runs
from daq.scale.study import carry_out, here
from daq.service.equip import Wanted
from daq.service.load import Wishes, load
from daq.service.start import begin
from daq.storage.digest import digest
from daq.storage.pack import pack_zip
from daq.storage.reader import open_visits
from tests.daq.scale.outside import ROOT
from tests.examples import CONFIGS

KERNELS = "tests.daq.scale.kernels"
RUNS, REHEARSED = 300, 6
BLOCKS, WAIT_S, WORKERS = 60, 0.5, 2
NIGHTS = 20_000
CLIENT = """
import sys, tempfile
from pathlib import Path
from daq.cli.study import runner
from daq.scale.job import job_of
from daq.scale.study import carry_out

if __name__ == "__main__":
    of = job_of("tests.daq.scale.kernels:normal", {}, 7, int(sys.argv[1]))
    with tempfile.TemporaryDirectory() as folder, runner(int(sys.argv[2]), None) as run:
        carry_out(of, Path(folder), 500, run)
    print(Path("/proc/self/status").read_text().partition("VmHWM:")[2].split()[0])
"""


def main(words: list[str]) -> None:
    """Print every figure."""
    runs = int(words[0]) if words else RUNS
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        busy = efficiency(folder)
        print(f"{WORKERS} workers, {BLOCKS} blocks of {WAIT_S:g} s: efficiency {busy:.3f}", flush=True)
        for workers in (0, WORKERS):
            once, tenfold = (memory_mb(folder, nights, workers) for nights in (NIGHTS, 10 * NIGHTS))
            told = f"{once:.1f} MB at {NIGHTS} nights, {tenfold:.1f} MB at {10 * NIGHTS}"
            print(f"client with {workers} workers: {told}, ratio {tenfold / once:.3f}", flush=True)
        pooled(folder, runs, words[1:])


def efficiency(folder: Path) -> float:
    """Return the share of the workers' time that goes into blocks."""
    of = job_of(f"{KERNELS}:waits", {"wait_s": WAIT_S}, 7, BLOCKS)
    with Cluster(WORKERS) as cluster:
        warm = job_of(f"{KERNELS}:waits", {"wait_s": 0.01}, 7, 2 * WORKERS)
        carry_out(warm, folder / "warm", 1, cluster)
        began_s = time.monotonic()
        carry_out(of, folder / "study", 1, cluster)
        return BLOCKS * WAIT_S / WORKERS / (time.monotonic() - began_s)


def memory_mb(folder: Path, nights: int, workers: int) -> float:
    """Return the most that a client of its own held."""
    (folder / "client.py").write_text(CLIENT)
    command = [sys.executable, str(folder / "client.py"), str(nights), str(workers)]
    told = subprocess.check_output(command, env=os.environ | {"PYTHONPATH": str(ROOT)}, text=True)
    return int(told) / 1024


def pooled(folder: Path, runs: int, buckets: list[str]) -> None:
    """Print what so many runs take from every kind of place, read and kept."""
    folders = some_runs(folder, runs)
    zips = [path.with_suffix(".zip") for path in folders]
    for path, target in zip(folders, zips, strict=True):
        pack_zip(path, target)
    places = {
        "folders": [str(path) for path in folders],
        "zips": [str(path) for path in zips],
        "zips in a local store": [f"file://{path}" for path in zips],
        "groups in a local store": [f"file://{path}/run.zarr" for path in folders],
    }
    for bucket in buckets:
        for path in zips:
            obstore.put(from_url(bucket), path.name, path.read_bytes())
        places[f"zips in {bucket}"] = [f"{bucket}/{path.name}" for path in zips]
    yardstick_s, kappas = 0.0, set[float]()
    for name, where in places.items():
        kept = Kept(folder / name.replace("/", "-"))
        read_s, kept_s = (timed(where, kept, kappas) for _ in range(2))
        yardstick_s = yardstick_s or read_s
        told = (f"{seconds:.1f} s ({seconds / yardstick_s:.2f})" for seconds in (read_s, kept_s))
        print(f"{runs} runs, {name}: {', kept '.join(told)}", flush=True)
    print(f"one kappa from everywhere: {len(kappas) == 1}")


def some_runs(folder: Path, runs: int) -> list[Path]:
    """Return run folders: a few rehearsals, and copies of them that counted more."""
    (folder / "rigs").mkdir()
    shutil.copy(CONFIGS / "rigs" / "lantern.toml", folder / "rigs")
    shutil.copy(CONFIGS / "lantern.toml", folder)
    changes = {"positions.number": 5, "itinerary.laps": 12, "itinerary.dwell_s": 0.5}
    made = []
    for seed in range(min(runs, REHEARSED)):
        loaded = load(folder / "lantern.toml", Wishes(seed=seed), changes=changes)
        made.append(begin(loaded, folder / "lab", Wanted("direct"))[0])
    return [another(made[at % len(made)], folder / "many" / "runs" / f"night-{at}", at) for at in range(runs)]


def another(run: Path, target: Path, more: int) -> Path:
    """Return a copy of a run whose first visit counted more."""
    shutil.copytree(run, target)
    group = zarr.open_group(target / "run.zarr", mode="r+")
    values: Any = group["values"]
    values[0, 0] = values[0, 0] + more
    group.attrs["digest"] = digest(open_visits(target))
    return target


def timed(where: list[str], kept: Kept, kappas: set[float]) -> float:
    """Return how long runs take to pool, and add what they say."""
    began_s = time.monotonic()
    kappas.add(pool_runs(where, here, kept).headline[0])
    return time.monotonic() - began_s


if __name__ == "__main__":
    main(sys.argv[1:])
