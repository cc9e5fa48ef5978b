"""Files that a person names: read, or refused in a sentence."""

from __future__ import annotations

import copy
import tomllib
from collections.abc import Mapping
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
        return tomllib.loads(text.decode("utf-8-sig"))  # some editors put a mark before the first byte
    except UnicodeDecodeError as error:
        line = text.count(b"\n", 0, error.start) + 1
        what = f"{path}: not a TOML file: line {line} holds a byte that is no UTF-8. Save the file as UTF-8."
        raise DescriptionError((what,)) from error
    except tomllib.TOMLDecodeError as error:
        raise DescriptionError((f"{path}: not a TOML file: {error}. Mend it there.",)) from error


def changed(table: Mapping[str, Any], changes: Mapping[str, Any]) -> dict[str, Any]:
    """Return a table with changes laid over it by dotted key ("estimate.dead_time_s").

    Raises
    ------
    DescriptionError
        When a key leads through what is no table.
    """
    found = copy.deepcopy(dict(table))
    for key, value in changes.items():
        *tables, name = key.split(".")
        inner = found
        for one in tables:
            inner = inner.setdefault(one, {})
            if not isinstance(inner, dict):
                raise DescriptionError((f"{key}: {one} is no table that could be changed. Mend the key.",))
        inner[name] = value
    return found
