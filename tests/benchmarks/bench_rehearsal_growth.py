"""How the cost of a rehearsal grows with its visits: `python -m tests.benchmarks.bench_rehearsal_growth`.

CPU of this process (in process, so that instruments and sequencer are in it), from 10^3 to 5 10^4 visits, or
to 10^6 with `--whole`. Linear means that a visit more costs the same at every length, in units of a yardstick
(JSON of a list of numbers) that is timed just before and after: a shared machine is not always as fast.
"""

from __future__ import annotations

import contextlib
import io
import json
import sys
import tempfile
import time
from pathlib import Path

from daq.cli import main
from tests.examples import CONFIGS

LAPS = (24, 250, 1250)
WHOLE = (2500, 25_000)


def night(folder: Path, laps: int) -> Path:
    """Return a measurement of five positions and so many laps; its source is steady: it has to last."""
    text = (CONFIGS / "lantern-quiet.toml").read_text().replace("number = 41", "number = 5")
    file = folder / f"laps-{laps}.toml"
    file.write_text(text.replace("laps = 38", f"laps = {laps}"))
    return file


def yardstick_us() -> float:
    """Return the CPU time of a piece of work that is always the same [us]."""
    numbers, begun = list(range(100)), time.process_time()
    for _ in range(40_000):
        json.dumps(numbers)
    return (time.process_time() - begun) / 40_000 * 1e6


def cost_s(file: Path, lab: Path) -> tuple[float, float, int]:
    """Return CPU and wall time of a rehearsal [s], and its visits."""
    out, begun, wall = io.StringIO(), time.process_time(), time.perf_counter()
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(io.StringIO()):
        main(["rehearse", str(file), "--link", "direct", "--into", str(lab), "--json"])
    spent = time.process_time() - begun, time.perf_counter() - wall
    return (*spent, int(json.loads(out.getvalue())["visits"]))


def growth() -> None:
    """Print the cost of every length, and of a visit more from one length to the next."""
    laps = (*LAPS, *WHOLE) if "--whole" in sys.argv else LAPS
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        (folder / "rigs").mkdir()
        (folder / "rigs" / "lantern-quiet.toml").write_text(
            (CONFIGS / "rigs" / "lantern-quiet.toml").read_text()
        )
        before = (0.0, 0)
        for many in laps:
            early_us = yardstick_us()
            cpu_s, wall_s, visits = cost_s(night(folder, many), folder / "lab")
            more_us = (cpu_s - before[0]) / (visits - before[1]) * 1e6
            stick_us = (early_us + yardstick_us()) / 2
            each = f"a visit more {more_us:.0f} us CPU, {more_us / stick_us:.0f} yardsticks"
            print(f"{visits:8} visits: CPU {cpu_s:7.1f} s, wall {wall_s:7.1f} s; {each}", flush=True)
            before = (cpu_s, visits)


if __name__ == "__main__":
    growth()
