"""Commands replay and import: an archived run, or a table of visits from elsewhere, taken up again."""

from __future__ import annotations

import argparse
import sys
import time
from collections.abc import Mapping
from contextlib import ExitStack
from pathlib import Path
from typing import Any

from daq.cli.answer import Answer
from daq.cli.night import Watch, interrupts, show_page
from daq.errors import DescriptionError
from daq.report import lines
from daq.service.equip import Wanted
from daq.service.figures import figures_of
from daq.service.foreign import take_in as taken_in
from daq.service.night import COMPLETE
from daq.service.owner import refuse_owned
from daq.service.replay import WhatIf
from daq.service.replay import replay as replayed
from daq.service.tape import Tape
from daq.service.whatif import differences, read_changes
from daq.storage.log import read_log
from daq.storage.reader import open_visits

FASTEST = 100.0
COUNTED = ("visit", "attempt", "opening", "position_mm", "values", "live_s")


def replay(arguments: argparse.Namespace) -> Answer:
    """Play an archived run again and say whether the same came out, or what a change changes."""
    what_if = WhatIf(read_changes(arguments.changes), arguments.faults, _times(arguments.speed))
    refuse_owned(arguments.into)
    with ExitStack() as stack:
        if arguments.page:
            show_page(stack, arguments.into, sys.stderr if arguments.json else sys.stdout)
        watch, began_s = Watch(), time.monotonic()
        with interrupts() as asked:
            wanted = Wanted(arguments.link, False, asked, watch.begins, watch.took)
            folder, tape, ended = replayed(arguments.run, arguments.into, wanted, what_if)
        watch.done()
    figures = _compared(arguments.run, folder, tape) | {"wall_s": time.monotonic() - began_s}
    return Answer(0 if ended == COMPLETE else 1, figures, [*lines(figures), "", *_told(figures, what_if)])


def take_in(arguments: argparse.Namespace) -> Answer:
    """Take in a table of visits from elsewhere as a finished run, and report on it."""
    folder = taken_in(arguments.table, arguments.mapping, arguments.into)
    figures = figures_of(folder)
    return Answer(0, figures, lines(figures))


def _times(speed: float | None) -> float | None:
    if speed is not None and not 1 <= speed <= FASTEST:
        raise DescriptionError((f"--speed {speed:g}: give 1 to {FASTEST:g}, or leave it out.",))
    return speed


def _compared(source: Path, folder: Path, tape: Tape) -> dict[str, Any]:
    before, after = figures_of(source), figures_of(folder)
    warned = tuple([_warned(one) for one in (source, folder)])
    old, new = open_visits(source), open_visits(folder)
    same = old.sizes["row"] == new.sizes["row"] and all(old[name].equals(new[name]) for name in COUNTED)
    return after | {
        "replay_of": tape.meta["run"],
        "same_digest": after["digest"] == tape.digest,
        "same_times": after["gate_digest"] == tape.gate_digest,
        "same_counts": same,
        "rows": len(tape.readings),
        "differences": differences(before, after, (warned[0], warned[1])),
    }


def _warned(folder: Path) -> list[str]:
    return [str(entry["id"]) for entry in read_log(folder) if entry["event"] == "warning"]


def _told(figures: Mapping[str, Any], what_if: WhatIf) -> list[str]:
    same = figures["same_digest"]
    head = f"a replay of {figures['replay_of']}: {figures['rows']} rows, " + (
        "every count, live time and flag is the archived one"
        if same
        else "counts and live times are the archived ones, and flags differ"
        if figures["same_counts"]
        else "NOT the archived counts"
    )
    if same and not (what_if.changes or what_if.faults):
        return [head]
    rows = [
        (row["same"], row["figure"], *map(_number, (row["old"], row["new"])))
        for row in figures["differences"]
    ]
    width = max(len(old) for _, _, old, _ in rows)
    table = [f"{' ' if same else '*'} {name:<22}{old:<{width}}  {new}" for same, name, old, new in rows]
    return [head, f"  {'':<22}{'archived':<{width}}  replayed", *table]


def _number(value: Any) -> str:
    return f"{value:.6g}" if isinstance(value, float) else str(value)
