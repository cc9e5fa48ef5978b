"""What a command answers: an exit status, figures for --json, and lines for people."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any


@dataclass(frozen=True, slots=True)
class Answer:
    """Exit status, JSON figures, lines of text."""

    status: int
    figures: Mapping[str, Any]
    lines: Sequence[str] = field(default=())
