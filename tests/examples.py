"""The example descriptions as tables that a test may change, and a short night made from them."""

from __future__ import annotations

import copy
import tomllib
from pathlib import Path
from typing import Any

from daq.description import Measurement, Rig, parse

CONFIGS = Path(__file__).resolve().parents[1] / "configs"


def measurement_table() -> dict[str, Any]:
    """Return the Lantern measurement as a table."""
    return tomllib.loads((CONFIGS / "lantern.toml").read_text())


def rig_table() -> dict[str, Any]:
    """Return the Lantern rig as a table."""
    return tomllib.loads((CONFIGS / "rigs" / "lantern.toml").read_text())


def changed(table: dict[str, Any], **changes: Any) -> dict[str, Any]:
    """Return a copy of a table with dotted keys (written with two underscores) set."""
    fresh = copy.deepcopy(table)
    for dotted, value in changes.items():
        *path, last = dotted.split("__")
        inner = fresh
        for key in path:
            inner = inner[key]
        inner[last] = value
    return fresh


def lantern(**changes: Any) -> Measurement:
    """Return the Lantern measurement with changes."""
    return parse(changed(measurement_table(), **changes), "lantern.toml", "measurement")


def lantern_rig(**changes: Any) -> Rig:
    """Return the Lantern rig with changes."""
    return parse(changed(rig_table(), **changes), "rigs/lantern.toml", "rig")
