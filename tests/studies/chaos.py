"""Chaos: rehearsed nights of ten hours over TCP, faults of every kind, the program killed in a third.

Each night runs in a process of its own, which writes down every visit when it is acknowledged, and where the
axes truly stood while it counted; the kill comes from outside, at a visit that the seed chooses and at
whatever instruction that happens to be. The night is then gone on with, as the service does it.
"""

from __future__ import annotations

import json
import os
import re
import signal
import tempfile
import time
import tomllib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import numpy as np

from daq import openings
from daq.errors import DaqError
from daq.records import Quality, Reading
from daq.service import equip, start
from daq.service.equip import Wanted
from daq.service.figures import figures_of
from daq.service.load import NO_WISHES, load
from daq.storage.feed import read_feed
from daq.storage.reader import open_visits
from simulators.bench import WaveletBench
from simulators.bench import open_bench as simulated
from tests.examples import CONFIGS
from tests.studies.rows import Each, rows

NIGHTS = 105
KILLED_EVERY = 3
HOURS = 10.0
SECONDS = HOURS * 3600
FEWER = (
    ("number = 41 ", "number = 5 "),
    ("start_mm = -12.8", "start_mm = -2.56"),
    ("stop_mm = 12.8", "stop_mm = 2.56"),
    ("dwell_s = 2.2 ", "dwell_s = 22.2 "),
)
GAUGE = """
[devices.gauge]
driver = "dialect"
dialect = "dialects/text-gauge.toml"
address = "tcp://127.0.0.1:7804"
timeout_s = 0.5
every_s = 60

[bench]
instruments = { gauge = "gauge" }
"""
LIMIT = "\n[quality.limits.gauge_pressure]\nbelow = 1e-2\nsettle_s = 300\n"
REPLIES = ("silent", "half", "garbage", "double", "late", "nak")
ENDED_WELL = ("complete", "ended at request after a stand")

ABOUT = (
    "Nights of 10 h over TCP in virtual time: 5 positions, 19 pairs, dwell 22 s, 1520 visits; a fault "
    "script of every kind, drawn anew for each; the process killed in every third"
)


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return what a row of nights left: what was lost, what was filed wrongly, how they ended."""
    found = list(each("chaos:night", {str(number): [number] for number in range(nights)}).values())
    return {"about": ABOUT, "rows": {"chaos": summed(found)}}


def summed(found: list[dict[str, Any]]) -> dict[str, Any]:
    """Return what nights left, together."""
    nights = len(found)
    with_kappa = [one for one in found if one["inside"] is not None]
    inside = sum(one["inside"] for one in with_kappa)
    kinds = sorted({kind for one in found for kind in one["struck"]})
    row: dict[str, Any] = {
        "nights": nights,
        "killed": sum(one["killed"] for one in found),
        "acknowledged": sum(one["acknowledged"] for one in found),
        "lost": sum(one["lost"] for one in found),
        "misfiled": sum(one["misfiled"] for one in found),
        "unseen": sum(one["unseen"] for one in found),
        "unseen_used": sum(one["unseen_used"] for one in found),
        "faults": sum(sum(one["struck"].values()) for one in found),
        "kinds": {kind: sum(one["struck"].get(kind, 0) for one in found) for kind in kinds},
        "complete": sum(one["ended"] == "complete" for one in found),
        "parked": sum(one["ended"] not in (*ENDED_WELL, "") for one in found),
        "without_reason": sum(one["ended"] == "" for one in found),
        "with_kappa": len(with_kappa),
        "inside": inside,
        "reasons": sorted({one["ended"] for one in found}),
    }
    row["detection"] = 1 - row["unseen_used"] / row["unseen"] if row["unseen"] else 1.0
    row["meets"] = {
        "lost": row["lost"] == 0,
        "misfiled": row["misfiled"] == 0,
        "ended": row["without_reason"] == 0,
        "inside": inside >= 0.88 * len(with_kappa),
    }
    return row


def script(number: int) -> dict[str, Any]:
    """Return the fault script of one night."""
    random = np.random.default_rng([8, number])

    def at() -> float:
        return float(random.uniform(60.0, SECONDS))

    def some(chance: float, make: Callable[[], dict[str, Any]]) -> Iterator[dict[str, Any]]:
        if random.random() < chance:
            yield make()

    faults: list[dict[str, Any]] = [
        {"kind": kind, "device": device, "per_hour": float(random.uniform(0.2, 2.0))}
        | ({"seconds": float(random.uniform(0.1, 1.2))} if kind == "late" else {})
        for kind in REPLIES
        for device in ("stages", "counter")
    ]

    def drop() -> dict[str, Any]:
        device = str(random.choice(["stages", "counter", "room"]))
        return {"kind": "drop", "device": device, "at_s": at(), "seconds": float(random.uniform(1, 900))}

    def slip(axis: str, hidden: bool) -> dict[str, Any]:
        size_mm = float(random.choice([-1, 1]) * random.uniform(0.05, 1.0))
        return {"kind": "slip", "axis": axis, "size_mm": size_mm, "hidden": hidden, "at_s": at()}

    for chance, make in (
        (0.8, drop),
        (0.5, drop),
        (0.08, lambda: {"kind": "alarm", "device": "stages", "at_s": at()}),
        (0.3, lambda: {"kind": "stall", "axis": "mask", "at_s": at()}),
        (0.3, lambda: {"kind": "stall", "axis": "detector", "at_s": at()}),
        (0.15, lambda: slip("detector", False)),
        (0.15, lambda: slip("mask", False)),
        (0.1, lambda: slip("mask", True)),
        (0.1, lambda: slip("detector", True)),
        (0.5, lambda: {"kind": "overflow", "device": "counter", "at_gate": int(random.integers(1, 1500))}),
        (0.2, lambda: _saturation(random, at())),
        (0.4, lambda: {"kind": "beam-off", "at_s": at(), "seconds": float(random.uniform(30, 1800))}),
        (0.4, lambda: {"kind": "beam-step", "at_s": at(), "factor": float(random.uniform(0.3, 1.2))}),
        (0.3, lambda: _trip(random, at())),
        (0.4, lambda: {"kind": "clock-step", "at_s": at(), "step_s": float(random.uniform(-3600, 3600))}),
    ):
        faults += some(chance, make)
    return {"seed": number, "fault": faults}


def _saturation(random: np.random.Generator, at_s: float) -> dict[str, Any]:
    rate_hz = float(random.uniform(1e4, 1e5))
    seconds = float(random.uniform(30, 300))
    return {"kind": "saturation", "device": "counter", "at_s": at_s, "seconds": seconds, "rate_hz": rate_hz}


def _trip(random: np.random.Generator, at_s: float) -> dict[str, Any]:
    seconds = float(random.uniform(120, 3600))
    return {"kind": "trip", "device": "gauge", "at_s": at_s, "seconds": seconds, "factor": 1e6}


def night(number: int) -> dict[str, Any]:
    """Return what became of one night."""
    with tempfile.TemporaryDirectory() as folder:
        lab = Path(folder)
        _describe(lab, number)
        kills = number % KILLED_EVERY == 0
        at_visit = int(np.random.default_rng([9, number]).integers(20, 1400)) if kills else None
        _carried_out(lab, None, at_visit)
        (run,) = (lab / "runs").iterdir()
        killed = (read_feed(run) or {}).get("ended") is None
        if killed:
            _carried_out(lab, run, None)
        return {"night": number, "killed": killed, **_left(lab, run)}


def _describe(lab: Path, number: int) -> None:
    (lab / "dialects").mkdir()
    (lab / "dialects" / "text-gauge.toml").write_bytes(
        (CONFIGS / "dialects" / "text-gauge.toml").read_bytes()
    )
    rig = (CONFIGS / "rigs" / "lantern.toml").read_text()
    rig = with_gauge(rig)
    rig = rig.replace("\nwindow_mm = 1.2\nedge_mm", "\nwindow_mm = 0\nedge_mm")  # a mask that slips is dark
    rig = rig.replace("seed = 1\n", f"seed = {1000 + number}\n")
    (lab / "rig.toml").write_text(rig)
    text = (CONFIGS / "lantern.toml").read_text()
    for old, new in FEWER:
        assert old in text, old
        text = text.replace(old, new)
    (lab / "night.toml").write_text(text.replace('"rigs/lantern.toml"', '"rig.toml"') + LIMIT)
    lines = [f"seed = {number}\n"]
    for fault in script(number)["fault"]:
        lines += ["[[fault]]\n", *(f"{key} = {json.dumps(value)}\n" for key, value in fault.items())]
    (lab / "faults.toml").write_text("".join(lines))
    tomllib.loads((lab / "faults.toml").read_text())


def with_gauge(rig: str) -> str:
    """Return a rig file with the gauge among its devices, and in the first table of its bench."""
    head, bench = GAUGE.split("[bench]\n")
    before, line, after = re.split(r"\n(\[bench\] .*\n)", rig, maxsplit=1)
    return f"{before}{head}\n{line}{bench}{after}"


def _carried_out(lab: Path, run: Path | None, at_visit: int | None) -> None:
    """Let a process carry a night out; kill it once so many visits are acknowledged."""
    child = os.fork()
    if child == 0:
        try:
            _perform(lab, run)
        finally:
            os._exit(0)
    seen = lab / "acknowledged.jsonl"
    while os.waitpid(child, os.WNOHANG) == (0, 0):
        time.sleep(0.01)
        if at_visit is not None and seen.exists() and seen.read_bytes().count(b"\n") >= at_visit:
            os.kill(child, signal.SIGKILL)
            os.waitpid(child, 0)
            return


def _perform(lab: Path, run: Path | None) -> None:
    """Carry a night out in this process and write down what it acknowledges, with the truth beside it."""
    benches: list[WaveletBench] = []

    def open_bench(*arguments: Any, **more: Any) -> WaveletBench:
        benches.append(simulated(*arguments, **more))
        return benches[-1]

    equip.open_bench = open_bench  # type: ignore[assignment,attr-defined]  # this process is the study's own
    log = os.open(lab / "acknowledged.jsonl", os.O_WRONLY | os.O_CREAT | os.O_APPEND)

    def took(reading: Reading) -> None:
        middle_ns = (reading.gate_open_ns + reading.gate_close_ns) // 2
        entry = {
            "visit": reading.visit,
            "attempt": reading.attempt,
            "value": reading.values[0],
            "true_mm": {axis: benches[-1].truth_mm(axis, middle_ns) for axis in ("mask", "detector")},
            "encoder_mm": {axis: ends[0] for axis, ends in reading.encoder_mm.items()},
        }
        os.write(log, (json.dumps(entry) + "\n").encode())

    wanted = Wanted("tcp", on_visit=took)
    try:
        if run is None:
            loaded = load(lab / "night.toml", NO_WISHES).with_faults(lab / "faults.toml")
            start.begin(loaded, lab, wanted)
        else:
            start.resume(run, wanted)
    except DaqError:
        pass  # the feed says why it ended
    struck = [one.kind for bench in benches for one in bench.struck() if one.outcome == "struck"]
    with (lab / "struck.txt").open("a") as file:
        file.writelines(f"{kind}\n" for kind in struck)


def _left(lab: Path, run: Path) -> dict[str, Any]:
    """Return what is in the archive of a night against what was acknowledged and what was true."""
    lines = (lab / "acknowledged.jsonl").read_text().splitlines()
    visits = open_visits(run)
    kept = {
        (int(visit), int(attempt)): row
        for row, (visit, attempt) in enumerate(
            zip(visits["visit"].values, visits["attempt"].values, strict=True)
        )
    }
    value, quality = visits["values"].values[:, 0], visits["quality"].values
    masks, places, use = visits["opening"].values, visits["position_mm"].values, visits["use"].values
    stops = {name: shown["mask"] for name, shown in visits.attrs["targets_mm"].items()}
    tolerance = visits.attrs["tolerance_mm"]
    lost = misfiled = unseen = unseen_used = 0
    for line in lines:
        entry = json.loads(line)
        row = kept.get((entry["visit"], entry["attempt"]))
        if row is None or float(value[row]) != entry["value"]:
            lost += 1
            continue
        target = {"mask": stops[openings.name(int(masks[row]))], "detector": float(places[row])}
        for axis, wanted_mm in target.items():
            if abs(entry["true_mm"][axis] - wanted_mm) <= tolerance[axis]:
                continue
            if (
                abs(entry["encoder_mm"][axis] - entry["true_mm"][axis]) > tolerance[axis]
            ):  # no encoder sees it
                unseen += 1
                unseen_used += bool(use[row] == 1)
            elif not quality[row] & (Quality.OFF_TARGET | Quality.MOVED):
                misfiled += 1
    struck = (lab / "struck.txt").read_text().split() if (lab / "struck.txt").exists() else []
    figures = figures_of(run)
    interval = figures["interval_95"]
    ended = (read_feed(run) or {}).get("ended") or {}
    return {
        "acknowledged": len(lines),
        "lost": lost,
        "misfiled": misfiled,
        "unseen": unseen,
        "unseen_used": unseen_used,
        "ended": str(ended.get("reason", "")),
        "struck": {kind: struck.count(kind) for kind in sorted(set(struck))},
        "pairs": figures["pairs"],
        "kappa": figures["kappa"],
        "kappa_se": figures["kappa_se"],
        "inside": None if interval is None else interval[0] <= figures["truth_kappa"] <= interval[1],
    }
