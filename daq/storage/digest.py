"""Digests of a run: equal for two runs that made the same visits with the same outcome."""

from __future__ import annotations

import hashlib

import numpy as np
import xarray as xr

_VISITS = ("visit", "attempt", "opening", "position_mm", "values", "live_s", "quality")
_GATES = ("gate_open_ns", "gate_close_ns")


def digest(dataset: xr.Dataset) -> str:
    """Return the SHA-256 over what was measured, row by row, little-endian.

    Parameters
    ----------
    dataset
        Visits as `open_visits` gives them: visit, attempt, opening and quality as int64, position_mm and
        live_s as float64, the values of all channels in their own type, in that order without gaps
        (visit, attempt, opening, position_mm, values, live_s, quality).
    """
    return _digest(dataset, _VISITS)


def gate_digest(dataset: xr.Dataset) -> str:
    """Return the SHA-256 over the opening and closing times of the gate; it repeats in virtual time only."""
    return _digest(dataset, _GATES)


def _digest(dataset: xr.Dataset, names: tuple[str, ...]) -> str:
    columns = [np.ascontiguousarray(dataset[name].values) for name in names]
    form = np.dtype(
        [(name, f"<{c.dtype.kind}8", c.shape[1:]) for name, c in zip(names, columns, strict=True)]
    )
    table = np.empty(len(columns[0]), form)
    for name, column in zip(names, columns, strict=True):
        table[name] = column
    return hashlib.sha256(table.tobytes()).hexdigest()
