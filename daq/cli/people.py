"""Command of the people: who may log in to the page of a lab."""

from __future__ import annotations

import argparse
import getpass
import sys

from daq.cli.answer import Answer
from daq.errors import DescriptionError
from daq.storage.people import add_person, remove_person, set_password
from daq.storage.people import people as known
from daq.storage.sessions import end_sessions


def people(arguments: argparse.Namespace) -> Answer:
    """List the people of a lab, let somebody in or out, change a password, or end sessions."""
    said = _ACTS[arguments.do](arguments)
    found = known(arguments.lab)
    figures = {"people": [{"name": one.name, "role": one.role} for one in found]}
    listed = [f"{one.name}  {one.role}" for one in found] or [
        "nobody: the page is read at this computer only"
    ]
    return Answer(0, figures, [*said, *listed])


def _add(arguments: argparse.Namespace) -> list[str]:
    add_person(arguments.lab, _name(arguments), arguments.role, _new_password(arguments.name))
    return [f"{arguments.name} may log in as {arguments.role}"]


def _change(arguments: argparse.Namespace) -> list[str]:
    set_password(arguments.lab, _name(arguments), _new_password(arguments.name))
    return [f"{arguments.name} has a new password and has to log in again"]


def _remove(arguments: argparse.Namespace) -> list[str]:
    remove_person(arguments.lab, _name(arguments))
    return [f"{arguments.name} may log in no longer"]


def _end(arguments: argparse.Namespace) -> list[str]:
    ended = end_sessions(arguments.lab, arguments.name)
    return [f"{ended} {'session' if ended == 1 else 'sessions'} ended"]


def _name(arguments: argparse.Namespace) -> str:
    if not arguments.name:
        raise DescriptionError((f"whom to {arguments.do}? Give a name after {arguments.do!r}.",))
    return str(arguments.name)


def _new_password(name: str) -> str:
    """Return a password typed twice at a terminal, or one line of standard input; never an argument."""
    if not sys.stdin.isatty():
        return sys.stdin.readline().rstrip("\n")
    first = getpass.getpass(f"password of {name}: ")
    if getpass.getpass("once more: ") != first:
        raise DescriptionError(("the two passwords differ; nothing was changed. Try again.",))
    return first


_ACTS = {
    "list": lambda arguments: [],
    "add": _add,
    "password": _change,
    "remove": _remove,
    "end-sessions": _end,
}
