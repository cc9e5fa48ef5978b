"""The page beside the run: what a refresh costs, what twenty pollers cost, what the sequencer feels of it.

python -m tests.benchmarks.bench_page [ROUNDS]
"""

from __future__ import annotations

import http.client
import json
import os
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from daq.devices.clock import RealClock
from daq.estimate import Judge, Rules, Running
from daq.itinerary import compose, plan_of
from daq.service.asked import Asked
from daq.service.course import carry_out
from daq.service.groups import Place
from daq.service.live import Live
from daq.service.night import Night
from daq.storage.log import RunLog
from dashboard.app import build
from tests.dashboard import feeds
from tests.dashboard.doors import HOST, SAME
from tests.dashboard.test_access import ask_news
from tests.examples import lantern, lantern_rig
from tests.standins import MemoryBench

POLLERS, POLLED_S = 20, 20.0
MOVE_S, DWELL_S = 0.05, 0.05
META = {
    **dict.fromkeys(("run", "title"), "lantern"),
    "kind": "run",
    "clock": "real",
    "slits": 3,
    "normalisation": "pairwise",
    "blinding": "open",
}


def refreshes(pairs: int, many: int = 40) -> tuple[float, float]:
    """Return the CPU of a refresh after news and of one without [ms], medians, for a run of so many pairs."""
    with tempfile.TemporaryDirectory() as folder:
        feeds.put(Path(folder), feeds.feed(pairs=pairs, planned=pairs + 7))
        client = build(Path(folder)).server.test_client()
        question, fresh_ms, same_ms = ask_news(client), [], []
        for seed in range(many):
            feeds.put(Path(folder), feeds.feed(pairs=pairs, planned=pairs + 7, seed=seed))
            fresh_ms.append(_cpu_ms(client, question))
            same_ms.append(_cpu_ms(client, question))
    return float(np.median(fresh_ms)), float(np.median(same_ms))


def _cpu_ms(client: Any, question: dict[str, Any]) -> float:
    began_s = time.process_time()
    answer = client.post("/_dash-update-component", json=question, headers=SAME)
    spent_s = time.process_time() - began_s
    if answer.status_code == 200:
        question["state"][1]["value"] = answer.get_json()["response"]["seen"]["data"]
    return 1e3 * spent_s


@contextmanager
def page(lab: Path) -> Iterator[tuple[subprocess.Popen[str], int]]:
    """Serve a lab in a process of its own, and give it with its port."""
    command = [sys.executable, "-m", "dashboard", str(lab)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as process:
        assert process.stdout is not None
        port = int(process.stdout.readline().strip().rstrip("/").rpartition(":")[2])
        try:
            yield process, port
        finally:
            process.kill()


@contextmanager
def polled(lab: Path, port: int, waits_s: list[float]) -> Iterator[None]:
    """Ask a page for its news from twenty threads, once a second each, beginning at different times."""
    question, over = ask_news(build(lab).server.test_client()), threading.Event()

    def poll(number: int) -> None:
        over.wait(number / POLLERS)
        while not over.is_set():
            began_s = time.perf_counter()
            _post(port, question)
            waits_s.append(time.perf_counter() - began_s)
            over.wait(max(0.0, 1 - (time.perf_counter() - began_s)))

    threads = [threading.Thread(target=poll, args=(number,), daemon=True) for number in range(POLLERS)]
    for thread in threads:
        thread.start()
    try:
        yield
    finally:
        over.set()
        for thread in threads:
            thread.join()


def _post(port: int, question: dict[str, Any]) -> None:
    here = f"127.0.0.1:{port}"
    connection = http.client.HTTPConnection(here, timeout=30)
    headers = SAME | {"Host": here, "Origin": f"http://{here}", "Content-Type": "application/json"}
    connection.request("POST", "/_dash-update-component", json.dumps(question), headers)
    connection.getresponse().read()
    connection.close()


def cpu_s(process: subprocess.Popen[str]) -> float:
    """Return the CPU that a process has spent (Linux)."""
    fields = Path(f"/proc/{process.pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def pollers() -> tuple[float, float]:
    """Return the share of a core that a page spends on twenty pollers, and their 95th percentile [ms]."""
    waits_s: list[float] = []
    with tempfile.TemporaryDirectory() as folder:
        lab = Path(folder)
        feeds.put(lab, feeds.feed())
        with page(lab) as (process, port), polled(lab, port, waits_s):
            time.sleep(2.0)
            before_s, began_s = cpu_s(process), time.monotonic()
            for seed in range(round(POLLED_S)):
                feeds.put(lab, feeds.feed(seed=seed))
                time.sleep(1.0)
            share = (cpu_s(process) - before_s) / (time.monotonic() - began_s)
    return share, 1e3 * float(np.percentile(waits_s, 95))


def lateness_ms(lab: Path) -> np.ndarray:
    """Return how much later than the move predicted each gate opened, in a run on the real clock [ms]."""
    folder = lab / "runs" / "20261201T170000Z-lantern"
    folder.mkdir(parents=True, exist_ok=True)
    measurement = lantern(itinerary__laps=4, positions__number=9, itinerary__dwell_s=DWELL_S)
    itinerary = compose(measurement, lantern_rig())
    bench = MemoryBench(RealClock(), mask_move_s=MOVE_S, detector_move_s=MOVE_S, readout_s=0.0)
    plan = plan_of(itinerary, measurement)
    night = Night(
        folder=folder,
        itinerary=itinerary,
        archive=bench.sink,  # type: ignore[arg-type]
        clock=bench.clock,
        devices=bench.devices,
        running=Running(plan),
        judge=Judge(plan, Rules()),
        live=Live(folder, META, itinerary, bench.clock),
        log=RunLog(folder),
        asked=Asked(),
    )
    carry_out(night, Place(0))
    gates = np.array([(one.gate_open_ns, one.gate_close_ns) for one in bench.sink.kept])
    return np.asarray((gates[1:, 0] - gates[:-1, 1]) / 1e6 - 1e3 * MOVE_S)


def timing(rounds: int) -> dict[str, float]:
    """Return the median lateness of gates without a page, with a polled one, and with one just killed."""
    late: dict[str, list[float]] = {"absent": [], "polled": [], "killed": []}
    with tempfile.TemporaryDirectory() as folder:
        lab = Path(folder)
        for _ in range(rounds):
            late["absent"] += lateness_ms(lab).tolist()
            with page(lab) as (process, port):
                with polled(lab, port, []):
                    late["polled"] += lateness_ms(lab).tolist()
                process.kill()
                late["killed"] += lateness_ms(lab).tolist()
    return {name: float(np.median(values)) for name, values in late.items()}


def main() -> None:
    """Print every figure beside its target."""
    rounds = int(sys.argv[1]) if len(sys.argv) > 1 else 3
    short, long = refreshes(12), refreshes(400)
    print(f"refresh, CPU: {short[0]:.1f} ms (12 pairs), {long[0]:.1f} ms (400 pairs); at most 5 ms idle")
    print(f"refresh without news: {short[1]:.1f} ms")
    share, slow_ms = pollers()
    print(f"{POLLERS} pollers: {100 * share:.0f} % of a core (at most 10), 95 % within {slow_ms:.0f} ms")
    late = timing(rounds)
    print(
        "a gate opens later than its move by, median: "
        + ", ".join(f"{k} {v:.2f} ms" for k, v in late.items())
    )
    whole = {name: MOVE_S * 1e3 + value for name, value in late.items()}
    print(
        f"from gate to gate beyond the move, polled over absent: {late['polled'] / late['absent']:.2f}, "
        f"killed over absent: {late['killed'] / late['absent']:.2f} (at most 1.2); "
        f"with the move: {whole['polled'] / whole['absent']:.3f}"
    )
    print(f"load of this machine: {os.getloadavg()[0]:.1f} on {os.cpu_count()} cores; page at {HOST}")


if __name__ == "__main__":
    main()
