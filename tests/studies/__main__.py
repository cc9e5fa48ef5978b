"""Run a study: `python -m tests.studies NAME [--nights N] [--workers N] [--json PATH]`; or write `tables`."""

from __future__ import annotations

import argparse
import json
import os
import sys
from functools import partial
from importlib import import_module
from pathlib import Path
from typing import Any

from daq.cli.study import runner
from tests.studies.rows import rows

STUDIES = (
    *("zigzag", "irregular", "benches", "exclusions", "quality", "cuts", "matrix", "chaos", "charts"),
    *("watched", "stopped", "places", "pooled", "tasks", "masks"),
)
RESULTS = Path(__file__).parent / "results"


def main(arguments: list[str] | None = None) -> int:
    """Run what was asked for; 1 where a figure misses its target."""
    parser = argparse.ArgumentParser(prog="python -m tests.studies", description=__doc__)
    parser.add_argument(
        "name", choices=(*STUDIES, "tables"), help="which study, or: write the tables from results"
    )
    parser.add_argument("--nights", type=int, help="how many nights (each study has its own default)")
    parser.add_argument("--workers", type=int, default=0, help="processes that draw the rows (0: this one)")
    parser.add_argument("--json", type=Path, help="where the result goes (default: print it)")
    wanted = parser.parse_args(arguments)
    if wanted.name == "tables":
        from tests.studies.tables import write

        write(RESULTS)
        return 0
    result = run(wanted.name, wanted.nights, wanted.workers)
    text = json.dumps(result, indent=1)
    if wanted.json is None:
        print(text)
    else:
        wanted.json.parent.mkdir(parents=True, exist_ok=True)
        wanted.json.write_text(text + "\n")
    missed = [f"{row}: {key}" for row, key in misses(result)]
    print("\n".join(missed) if missed else "every figure meets its target", file=sys.stderr)
    return 1 if missed else 0


def run(name: str, nights: int | None, workers: int = 0) -> dict[str, Any]:
    """Return the result of a study with what it cost; the same whatever the number of workers."""
    study = import_module(f"tests.studies.{name}").study
    begun = _cpu_s()
    with runner(workers, None) as draws:
        each = partial(rows, runner=draws)
        result = study(each=each) if nights is None else study(nights, each=each)
    return {"study": name, **result, "cpu_s": round(_cpu_s() - begun, 1), "cores": os.cpu_count()}


def _cpu_s() -> float:
    """Return the CPU time of this process and of those that it has waited for."""
    used = os.times()
    return used.user + used.system + used.children_user + used.children_system


def misses(result: dict[str, Any]) -> list[tuple[str, str]]:
    """Return every target that a result misses, as row and key."""
    return [
        (row, key)
        for row, found in result["rows"].items()
        for key, met in found.get("meets", {}).items()
        if not met
    ]


if __name__ == "__main__":
    sys.exit(main())
