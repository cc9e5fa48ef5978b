"""Files that a person names: read, or refused in a sentence."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from daq.errors import DescriptionError


def read_file(path: Path) -> bytes:
    """Return the bytes of a file; raises DescriptionError where it cannot be read."""
    try:
        return path.read_bytes()
    except OSError as error:
        reason = error.strerror or "cannot be read"
        raise DescriptionError((f"{path}: {reason.lower()}. Name a readable file.",)) from error


def read_table(text: bytes, path: Path) -> dict[str, Any]:
    """Return a TOML file's bytes as a table; raises DescriptionError where they are none."""
    try:
        return tomllib.loads(text.decode())
    except (UnicodeDecodeError, tomllib.TOMLDecodeError) as error:
        raise DescriptionError((f"{path}: not a TOML file: {error}. Mend it there.",)) from error
