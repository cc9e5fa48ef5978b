"""tercet: the sequencer. Public names are loaded when first used, so that `tercet --help` is quick."""

from importlib import import_module
from typing import Any

_HOMES = {"open_visits": "daq.storage.reader", "estimate_run": "daq.estimate"}
__all__ = ["estimate_run", "open_visits"]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'daq' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
