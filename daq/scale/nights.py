"""Archived nights: what each says under the present estimator, a run a draw."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from typing import Any

import numpy as np
import xarray as xr

from daq.errors import StorageError
from daq.estimate import estimate_run, plan_of_dataset
from daq.estimate.account import account_of
from daq.storage.elsewhere import open_finished

SHARED = {"dead time": "dead_time", "slit geometry": "slits"}  # line of the budget -> name of its columns


def night(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, float]:
    """Return the figures of the run whose number this draw has; nothing of it is random.

    `*_load` what a cause that several nights share does to kappa, `*_of` a number for whose cause it is.
    """
    number = generator.bit_generator.seed_seq.spawn_key[-1]  # type: ignore[attr-defined]
    where = parameters["runs"][number]
    visits = open_finished(where)
    try:
        found = estimate_run(visits)
    except ValueError as error:
        raise StorageError(str(error), where=where) from error
    if found.kappa is None or not found.kappa_se or found.dof is None or not found.printable:
        raise StorageError("this run has no kappa with an error bar", where=where, remedy="Leave it out")
    return {
        "kappa": found.kappa,
        "kappa_se": found.kappa_se,
        "dof": float(found.dof),
        "kappa_counting_se": found.kappa_counting_se or float("nan"),
        "pairs": float(found.pairs),
        "visits": float(visits.sizes["row"]),
        "hidden_by": _numbered(_hidden_by(visits)),
        **_loads(visits),
    }


def _hidden_by(visits: xr.Dataset) -> str:
    """Return whose offset moves kappa; nothing where none does."""
    hidden = plan_of_dataset(visits).blinding
    return hidden.scope if hidden.hides else ""


def _loads(visits: xr.Dataset) -> dict[str, float]:
    found = account_of(visits).budget
    lines = {} if found is None else {line.name: line.value or 0.0 for line in found.lines}
    set_up = visits.attrs.get("set_up", {})
    owner = {"dead_time": str(set_up.get("rig")), "slits": f"{set_up.get('rig')} {set_up.get('chip')}"}
    return {
        key: value
        for line, name in SHARED.items()
        for key, value in (
            (f"{name}_load", float(lines.get(line, 0.0))),
            (f"{name}_of", _numbered(owner[name])),
        )
    }


def _numbered(name: str) -> float:
    """Return a number that stands for a name: whole, and exact in a float."""
    return float(int.from_bytes(hashlib.sha256(name.encode()).digest()[:6])) if name else 0.0
