"""Kappa and its jackknife error from visits.csv and settings.json, with the standard library alone."""

import csv
import json
import sys
from collections import Counter
from math import sqrt
from pathlib import Path

folder = Path(sys.argv[1])
settings = json.loads((folder / "settings.json").read_text("utf-8"))
with (folder / "visits.csv").open(encoding="utf-8", newline="") as file:
    rows = [row for row in csv.DictReader(file) if row["use"] == "1" and row["pair_complete"] == "1"]


def kappa(rows: list[dict[str, str]]) -> float:
    counts, seconds, places = Counter[tuple[str, str]](), Counter[tuple[str, str]](), {}
    for row in rows:
        seen, live = float(row["values_0"]), float(row["live_s"])
        key = row["position_mm"], row["opening_name"]
        counts[key] += seen / (1 - seen * settings["dead_time_s"] / live)  # type: ignore[assignment]
        seconds[key] += live  # type: ignore[assignment]
        places[row["position_mm"]] = row
    epsilon = delta = 0.0
    for place, row in places.items():
        rate = {name: counts[place, name] / seconds[place, name] for _, name in counts}
        signs = {name: (-1) ** (settings["slits"] - len(name.replace("none", ""))) for name in rate}
        epsilon += float(row["weight"]) * sum(signs[name] * rate[name] for name in rate)
        for pair in (name for name in rate if len(name) == 2):
            term = rate[pair] - rate[pair[0]] - rate[pair[1]] + rate["none"]
            delta += float(row["weight"]) * float(row[f"sign_{pair}"]) * term
    return epsilon / delta


blocks = sorted({row["pair"] for row in rows})
left_out = [kappa([row for row in rows if row["pair"] != block]) for block in blocks]
mean, g = sum(left_out) / len(blocks), len(blocks)
print(json.dumps([kappa(rows), sqrt((g - 1) / g * sum((one - mean) ** 2 for one in left_out))]))  # noqa: T201
