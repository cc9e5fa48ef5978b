"""Archived nights: what each says under the present estimator, and its sums pair by pair."""

from __future__ import annotations

import io
import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Self

import numpy as np
import xarray as xr

from daq.errors import StorageError
from daq.estimate import Plan, estimate_run, plan_of_dataset
from daq.estimate.account import account_of
from daq.estimate.dataset import rows_of_dataset
from daq.estimate.settle import settle, taking
from daq.estimate.sums import Sums, sums_of
from daq.estimate.visits import visits_of
from daq.storage.elsewhere import open_finished

SHARED = {"dead time": "dead_time", "slit geometry": "slits"}  # line of the budget -> name of its load
_TABLES = ("value", "live", "variance")


@dataclass(frozen=True, slots=True)
class Night:
    """A run as its estimate says: figures by name, and, unless it is hidden, what the estimate took.

    `figures`: kappa, kappa_se, dof, kappa_counting_se, pairs, visits; `loads`: what a cause that nights may
    share does to kappa, `owners` whose cause it is; `hidden_by`: the scope whose offset moves kappa, or "".
    `plan` has no visits.
    """

    figures: Mapping[str, float]
    loads: Mapping[str, float]
    owners: Mapping[str, str]
    hidden_by: str
    sums: Sums | None = None
    plan: Plan | None = None

    def to_bytes(self) -> bytes:
        """Return the night as a compressed archive of arrays."""
        told = {name: getattr(self, name) for name in ("figures", "loads", "owners", "hidden_by")}
        arrays: dict[str, Any] = {}
        if self.sums is not None and self.plan is not None:
            plan = self.plan
            told |= {name: getattr(plan, name) for name in ("slits", "normalisation")}
            arrays = {name: getattr(self.sums, name) for name in _TABLES}
            arrays |= {name: getattr(plan, name) for name in ("openings", "positions_mm", "weights")}
            arrays |= {f"sign {term}": column for term, column in plan.signs.items()}
        file = io.BytesIO()
        np.savez_compressed(file, told=np.frombuffer(json.dumps(told).encode(), np.uint8), **arrays)
        return file.getvalue()

    @classmethod
    def from_bytes(cls, data: bytes) -> Self:
        """Return the night that `to_bytes` wrote."""
        with np.load(io.BytesIO(data), allow_pickle=False) as arrays:
            held = dict(arrays)
        told = json.loads(held.pop("told").tobytes())
        slits, normalisation = told.pop("slits", None), told.pop("normalisation", None)
        if slits is None:
            return cls(**told)
        signs = {name.removeprefix("sign "): held[name] for name in held if name.startswith("sign ")}
        no_visits: dict[str, Any] = dict.fromkeys(
            ("stand", "pair", "position", "opening"), np.zeros(0, np.int64)
        )
        plan = Plan(
            slits=slits,
            normalisation=normalisation,
            signs=signs,
            dead_time_s=0.0,  # the sums are corrected for it
            dead_time_kind="non-paralysable",
            planned_pairs=len(held["value"]),
            **{name: held[name] for name in ("openings", "positions_mm", "weights")},
            **no_visits,
        )
        return cls(**told, sums=Sums(*(held[name] for name in _TABLES)), plan=plan)


def night(parameters: Mapping[str, Any], generator: np.random.Generator) -> bytes:
    """Return the run whose number this draw has, as bytes; nothing of it is random."""
    number = generator.bit_generator.seed_seq.spawn_key[-1]  # type: ignore[attr-defined]
    return night_of(parameters["runs"][number]).to_bytes()


def night_of(where: str) -> Night:
    """Return a run, read and estimated.

    Raises
    ------
    StorageError
        When it cannot be read, or has no kappa with an error bar.
    """
    visits = open_finished(where)
    try:
        found = estimate_run(visits)
    except ValueError as error:
        raise StorageError(str(error), where=where) from error
    if found.kappa is None or not found.kappa_se or found.dof is None or not found.printable:
        raise StorageError("this run has no kappa with an error bar", where=where, remedy="Leave it out")
    figures = {
        "kappa": found.kappa,
        "kappa_se": found.kappa_se,
        "dof": float(found.dof),
        "kappa_counting_se": found.kappa_counting_se or float("nan"),
        "pairs": float(found.pairs),
        "visits": float(visits.sizes["row"]),
    }
    plan = plan_of_dataset(visits)
    hidden = plan.blinding.scope if plan.blinding.hides else ""
    if hidden:
        return Night(figures, *_shared(visits), hidden)
    return Night(figures, *_shared(visits), hidden, _sums(visits, plan), plan)


def _sums(dataset: xr.Dataset, plan: Plan) -> Sums:
    visits = visits_of(rows_of_dataset(dataset), plan)
    return sums_of(visits, plan, taking(settle(visits, plan), visits, plan))


def _shared(visits: xr.Dataset) -> tuple[dict[str, float], dict[str, str]]:
    found = account_of(visits).budget
    lines = {} if found is None else {line.name: line.value or 0.0 for line in found.lines}
    set_up = visits.attrs.get("set_up", {})
    owners = {"dead_time": str(set_up.get("rig")), "slits": f"{set_up.get('rig')} {set_up.get('chip')}"}
    return {name: float(lines.get(line, 0.0)) for line, name in SHARED.items()}, owners
