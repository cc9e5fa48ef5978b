"""Commands after a run: report."""

from __future__ import annotations

import argparse

from daq.cli.answer import Answer
from daq.report import lines
from daq.service.figures import figures_of


def report(arguments: argparse.Namespace) -> Answer:
    """Print the report of a run, from its archive alone."""
    figures = figures_of(arguments.run)
    return Answer(0, figures, lines(figures))
