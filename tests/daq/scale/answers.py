"""What a command answers with `--json`."""

from __future__ import annotations

import json
from typing import Any

import pytest

from daq.cli import main


def answer(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, dict[str, Any]]:
    """Return exit status and figures of a command."""
    capsys.readouterr()
    status = main([*words, "--json"])
    return status, json.loads(capsys.readouterr().out)
