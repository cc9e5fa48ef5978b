"""Run studies of plans: `python -m tests.studies.plans NAME... [--nights N] [--workers N] [--into PATH]`."""

from __future__ import annotations

import argparse
import json
import sys
from pathlib import Path

from tests.studies.__main__ import RESULTS, misses, run

STUDIES = (
    "plan_orders",
    "plan_search",
    "plan_drift",
    "plan_dwell",
    "plan_ripple",
    "plan_nights",
    "plan_rehearsals",
)


def main(arguments: list[str] | None = None) -> int:
    """Run what was asked for; 1 where a figure misses its target."""
    parser = argparse.ArgumentParser(prog="python -m tests.studies.plans", description=__doc__)
    parser.add_argument("names", nargs="+", choices=STUDIES, metavar="NAME", help=", ".join(STUDIES))
    parser.add_argument("--nights", type=int, help="how many draws (each study has its own default)")
    parser.add_argument("--workers", type=int, default=0, help="processes that draw the rows (0: this one)")
    parser.add_argument("--into", type=Path, default=RESULTS, help="folder of the results, NAME.json each")
    wanted = parser.parse_args(arguments)
    missed = 0
    wanted.into.mkdir(parents=True, exist_ok=True)
    for name in wanted.names:
        result = run(name, wanted.nights, wanted.workers)
        (wanted.into / f"{name}.json").write_text(json.dumps(result, indent=1) + "\n")
        for row, key in misses(result):
            missed += 1
            print(f"{name}, {row}: {key}", file=sys.stderr)
    return 1 if missed else 0


if __name__ == "__main__":
    sys.exit(main())
