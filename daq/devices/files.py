"""Files: dialect files that a rig file names, read and put into its table."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from daq.description import Dialect, parse
from daq.errors import DescriptionError

FOLDER = "dialects"


def read_dialect(path: Path) -> tuple[Dialect, bytes]:
    """Return a dialect and its file's bytes.

    Raises
    ------
    DescriptionError
        With every problem of the file at once.
    """
    try:
        text = path.read_bytes()
        table = tomllib.loads(text.decode("utf-8"))
    except (OSError, ValueError) as error:
        reason = error.strerror if isinstance(error, OSError) else error
        raise DescriptionError(
            (f"{path}: it cannot be read as TOML ({reason}). Name a dialect file.",)
        ) from error
    return parse(table, str(path), "dialect"), text


def with_dialects(table: Mapping[str, Any], folder: Path) -> tuple[dict[str, Any], dict[str, bytes]]:
    """Return a rig's table with its dialects in the place of their paths, and the bytes of those files.

    Parameters
    ----------
    table
        A rig file as it was read; what is not as it should be is left for `parse` to tell.
    folder
        Where the rig file is: paths are beside it, or in the folder of a run, where they are kept verbatim.

    Raises
    ------
    DescriptionError
        With every problem of every dialect file at once.
    """
    entries, texts, problems = table.get("devices"), dict[str, bytes](), list[str]()
    if not isinstance(entries, Mapping):
        return dict(table), texts
    devices = dict(entries)
    for name, entry in entries.items():
        if isinstance(entry, Mapping) and isinstance(entry.get("dialect"), str):
            try:
                dialect, text = read_dialect(_found(entry["dialect"], folder))
            except DescriptionError as error:
                problems += error.problems
            else:
                devices[name] = {**entry, "dialect": dialect}
                texts[f"{FOLDER}/{Path(entry['dialect']).name}"] = text
    if problems:
        raise DescriptionError(tuple(problems))
    return {**table, "devices": devices}, texts


def _found(named: str, folder: Path) -> Path:
    kept = folder / FOLDER / Path(named).name  # in a run folder, where the rig file's own paths lead nowhere
    beside = folder / named
    return kept if kept.exists() and not beside.exists() else beside
