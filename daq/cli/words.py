"""The words of the command line: commands, options, and an example for each."""

from __future__ import annotations

import argparse
from pathlib import Path
from typing import Any

from daq.cli.words_after import after_words, blind_words, scale_words
from daq.cli.words_lab import people_words, service_words, watch_words
from daq.cli.words_shared import RUN, add, folders, into, link, wishes
from daq.records import TASKS

ABOUT = """Plans and runs multi-mask interference scans, loses no count, and gives a residual that can be
defended.

The software holds and stops here are requests over data links. They are no safety functions."""


def parser() -> argparse.ArgumentParser:
    """Return the parser of the whole command line."""
    whole = argparse.ArgumentParser(
        prog="tercet",
        description=ABOUT,
        formatter_class=argparse.RawDescriptionHelpFormatter,
        epilog="example: tercet rehearse --page    a whole simulated night with the live page",
    )
    commands = whole.add_subparsers(title="commands", required=True, metavar="COMMAND")
    _plan_words(commands)
    _night_words(commands)
    _replay_words(commands)
    _task_words(commands)
    service_words(commands)
    watch_words(commands)
    after_words(commands)
    people_words(commands)
    blind_words(commands)
    scale_words(commands)
    return whole


def _plan_words(commands: Any) -> None:
    check = add(
        commands,
        "check",
        "plan:check",
        "read a description and list every problem",
        "tercet check lantern.toml",
    )
    check.add_argument("file", type=Path, metavar="FILE", help="a measurement, a rig or a dialect (TOML)")
    check.add_argument(
        "--try", dest="address", metavar="HOST:PORT", help="talk to a device in this dialect, asking only"
    )
    check.add_argument("--letter", default="X", help="the axis of a stage controller that is asked (X)")
    compose = add(
        commands,
        "compose",
        "compose:compose",
        "plan a run: the order, the error bar to come, and what would make it smaller",
        "tercet compose lantern.toml --hours 8 --picture plan.svg --write tonight.toml",
    )
    compose.add_argument("file", type=Path, metavar="FILE", help="a measurement (TOML)")
    wishes(compose)
    compose.add_argument(
        "--write", type=Path, metavar="PLAN", help="write a measurement that pins every choice, for run"
    )
    records = "take the newest valid bench records of this lab, and say which"
    compose.add_argument("--bench", type=Path, metavar="LAB", help=records)
    compose.add_argument(
        "--picture", type=Path, metavar="FILE", help="draw the plan; the name ends in .svg, .png or .pdf"
    )


def _night_words(commands: Any) -> None:
    rehearse = add(
        commands,
        "rehearse",
        "night:rehearse",
        "carry out a whole run on simulated hardware in virtual time",
        "tercet rehearse --hours 2 --seed 7 --page",
    )
    rehearse.add_argument(
        "file", type=Path, nargs="?", metavar="FILE", help="a measurement; the Lantern night when left out"
    )
    wishes(rehearse)
    link(rehearse)
    folders(rehearse)
    twin = "a simulated rig in the place of the measurement's own: the rehearsal that arming asks for"
    rehearse.add_argument("--rig", type=Path, metavar="RIG", help=twin)
    script = "a fault script: what goes wrong on the simulated bench, and when"
    rehearse.add_argument("--faults", type=Path, metavar="FILE", help=script)
    source = (
        "let the source drift as the description's pilot says (pilot), or as it did in a run (its folder)"
    )
    rehearse.add_argument("--drift", metavar="PILOT", help=source)
    rehearse.add_argument(
        "--page", action="store_true", help="show the live page; on a terminal it stays until Ctrl-C"
    )
    run = add(
        commands,
        "run",
        "night:run",
        "start a run now, in the foreground, on the real clock",
        "tercet run lantern.toml --into lab",
    )
    run.add_argument("file", type=Path, nargs="?", metavar="FILE", help="a measurement (TOML)")
    wishes(run)
    folders(run)
    run.add_argument(
        "--home", action="store_true", help="home axes that lost their reference (look at the bench first)"
    )
    run.add_argument("--page", action="store_true", help="show the live page while the run goes on")


def _task_words(commands: Any) -> None:
    """Add the bench tasks."""
    what = "do a guided task at the bench: by-hand (home, go, read, the rate as a bar), or one that measures"
    task = add(commands, "task", "task:task", what, "tercet task dark lantern.toml --into lab")
    task.add_argument(
        "name", choices=("by-hand", *TASKS), metavar="NAME", help=", ".join(("by-hand", *TASKS))
    )
    task.add_argument("file", type=Path, metavar="FILE", help="a measurement (by-hand: a rig; TOML)")
    task.add_argument("--into", type=Path, default=Path("lab"), metavar="LAB", help="lab folder (./lab)")
    task.add_argument("--by", metavar="NAME", help="who does it (your login name)")
    script = "a fault script: what goes wrong on a simulated bench, and when"
    task.add_argument("--faults", type=Path, metavar="FILE", help=script)


def _replay_words(commands: Any) -> None:
    again = "play an archived run again through simulated instruments, as it was or with something changed"
    example = f"tercet replay {RUN} --set estimate.dead_time_s=50e-9"
    replay = add(commands, "replay", "again:replay", again, example)
    replay.add_argument("run", type=Path, metavar="RUN", help="a run folder")
    into(replay)
    link(replay)
    speed = "so many times as fast as the wall clock, 1 to 100 (as fast as it goes)"
    replay.add_argument("--speed", type=float, metavar="TIMES", help=speed)
    change = "change a key of its description, like quality.fingerprint_p=1e-6; may be given again"
    replay.add_argument(
        "--set", dest="changes", action="append", default=[], metavar="KEY=VALUE", help=change
    )
    replay.add_argument("--faults", type=Path, metavar="FILE", help="a fault script to lay over it")
    replay.add_argument("--page", action="store_true", help="show the live page meanwhile")
    foreign = "take in a table of visits that was made elsewhere (CSV), as a finished run"
    example = "tercet import visits.csv visits-elsewhere.toml --into lab"
    taken = add(commands, "import", "again:take_in", foreign, example)
    taken.add_argument("table", type=Path, metavar="TABLE", help="a CSV file, one line a visit")
    taken.add_argument("mapping", type=Path, metavar="MAPPING", help="which column is what (TOML)")
    into(taken)
