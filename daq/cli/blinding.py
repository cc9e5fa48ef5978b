"""The command blind: hide kappa of a run behind an offset, freeze its analysis, reveal it for good."""

from __future__ import annotations

import argparse
import sys

from daq.cli.answer import Answer
from daq.errors import DescriptionError
from daq.service.blind import blind as blinded
from daq.service.blind import freeze, reveal
from daq.storage.blinding import read_events, revealed_offsets, state_of

EYES = "It protects people from their own eyes: the counts on disk stay as they are, and say so."


def blind(arguments: argparse.Namespace) -> Answer:
    """Blind a run, freeze its analysis, or reveal it."""
    if arguments.freeze and arguments.reveal:
        raise DescriptionError(("tercet blind: freeze first; reveal is a step of its own.",))
    if arguments.freeze:
        freeze(arguments.run, arguments.by)
    elif arguments.reveal:
        reveal(arguments.run, arguments.by, _typed)
    else:
        blinded(arguments.run, arguments.scope, arguments.halfwidth, arguments.by)
    events = read_events(arguments.run)
    state = state_of(events)
    figures = {"state": state, "scope": events[0]["scope"], "halfwidth": events[0]["halfwidth"]}
    figures |= {"commitments": events[0]["commitments"], "events": events}
    lines = [
        f"{arguments.run.name}: {state}, scope {events[0]['scope']}, half width {events[0]['halfwidth']}"
    ]
    if state == "revealed":
        offsets = revealed_offsets(events)
        figures["offsets"] = offsets
        lines += [f"offset of {term}: {offset:+.6e}, as committed to" for term, offset in offsets.items()]
    return Answer(0, figures, [*lines, EYES] if state != "revealed" else lines)


def _typed(question: str) -> str:
    """Return what a person types."""
    print(question, end="", file=sys.stderr, flush=True)
    return sys.stdin.readline().rstrip("\n")
