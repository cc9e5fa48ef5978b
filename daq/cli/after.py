"""Commands after a run: report, verify, note, accept."""

from __future__ import annotations

import argparse

from daq.cli.answer import Answer
from daq.errors import StorageError
from daq.report import lines
from daq.service.figures import figures_of
from daq.service.remarks import accept as accepted
from daq.service.remarks import note as noted
from daq.storage.verify import verify as verified


def report(arguments: argparse.Namespace) -> Answer:
    """Print the report of a run, from its archive alone."""
    figures = figures_of(arguments.run)
    return Answer(0, figures, lines(figures))


def verify(arguments: argparse.Namespace) -> Answer:
    """Check every part of a run against what was written, and say what is still good."""
    found = verified(arguments.run)
    figures = {"ok": found.ok, "visits": found.visits, "rows": found.rows, "problems": list(found.problems)}
    whole = f"{found.visits} of {found.rows} visits are whole"
    if found.ok:
        return Answer(0, figures, [f"{arguments.run}: {whole}; nothing is damaged."])
    return Answer(StorageError.exit_status, figures, [*(f"{one}." for one in found.problems), f"{whole}."])


def note(arguments: argparse.Namespace) -> Answer:
    """Add a note to the log of a run."""
    entry = noted(arguments.run, arguments.text, arguments.by)
    return Answer(0, entry, [f"noted at {entry['utc']} by {entry['by']}"])


def accept(arguments: argparse.Namespace) -> Answer:
    """Add a person's verdict on a run to its log."""
    entry = accepted(arguments.run, arguments.verdict, arguments.by, arguments.remark)
    return Answer(0, entry, [f"{entry['by']}: this night {entry['verdict']} (digest {entry['digest'][:12]})"])
