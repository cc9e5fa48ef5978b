"""What the words of several commands share: a command with its example, wishes, folders."""

from __future__ import annotations

import argparse
from collections.abc import Callable
from importlib import import_module
from pathlib import Path
from typing import Any

from daq.cli.answer import Answer

RUN = "lab/runs/20261201T170000Z-lantern"


def add(commands: Any, name: str, target: str, text: str, example: str) -> argparse.ArgumentParser:
    """Add a command with its sentence, its example and `--json`; its module is imported when it is needed."""
    one: argparse.ArgumentParser = commands.add_parser(
        name, help=text, description=f"{text[:1].upper()}{text[1:]}.", epilog=f"example: {example}"
    )
    one.add_argument("--json", action="store_true", help="print one JSON object last on standard output")
    one.set_defaults(command=_later(target))
    return one


def _later(target: str) -> Callable[[argparse.Namespace], Answer]:
    """Return a command whose module is imported when it is carried out."""
    module, _, function = target.partition(":")

    def command(arguments: argparse.Namespace) -> Answer:
        answer: Answer = getattr(import_module(f"daq.cli.{module}"), function)(arguments)
        return answer

    return command


def wishes(one: argparse.ArgumentParser) -> None:
    """Add what a person may wish of a plan."""
    one.add_argument("--hours", type=float, help="length in hours, rounded down to whole pairs of laps")
    one.add_argument("--seed", type=int, help="one seed for the order and for the simulated bench")
    orders = ("zigzag", "searched", "cyclic", "random", "blocked")
    one.add_argument("--order", choices=orders, help="another order than the description's")


def link(one: argparse.ArgumentParser) -> None:
    """Add how instruments are reached."""
    how = "how instruments are reached (tcp)"
    one.add_argument("--link", choices=("tcp", "direct"), default="tcp", help=how)


def into(one: argparse.ArgumentParser) -> None:
    """Add the lab folder that a run goes to."""
    one.add_argument("--into", type=Path, default=Path("lab"), metavar="LAB", help="lab folder (./lab)")


def folders(one: argparse.ArgumentParser) -> None:
    """Add the lab folder, and the run to go on with."""
    into(one)
    one.add_argument(
        "--resume", type=Path, metavar="RUN", help="go on with an interrupted run, after its last count"
    )
