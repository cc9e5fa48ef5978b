"""The command line: words for people, one JSON object with --json; heavy imports wait for their command."""

from __future__ import annotations

import json
import logging
import sys
from collections.abc import Sequence

from daq.cli.answer import Answer
from daq.cli.words import parser
from daq.errors import DaqError, DescriptionError

ENDED_EARLY = 1


def main(argv: Sequence[str] | None = None) -> int:
    """Carry out one command and return its exit status.

    0 done, 1 the run ended early or a check failed, 2 the description, 3 a device, 4 the archive.
    """
    arguments = parser().parse_args(argv)
    logging.basicConfig(level=logging.ERROR, format="%(message)s")
    try:
        answer: Answer = arguments.command(arguments)
    except DaqError as error:
        answer = _refused(error)
    except KeyboardInterrupt:
        answer = Answer(ENDED_EARLY, {"ok": False, "problems": ["interrupted"]}, [])
    if arguments.json:
        print(json.dumps(answer.figures, allow_nan=False))
    elif answer.lines:
        print("\n".join(answer.lines))
    return answer.status


def _refused(error: DaqError) -> Answer:
    problems = list(error.problems) if isinstance(error, DescriptionError) else [str(error)]
    print("\n".join(problems), file=sys.stderr)
    return Answer(error.exit_status, {"ok": False, "problems": problems}, [])
