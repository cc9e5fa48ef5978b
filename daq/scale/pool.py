"""Pooling archived runs: estimated anew one by one, then taken together, with how far they agree."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.errors import DescriptionError, StorageError
from daq.estimate.pooling import LeftOut, Pooled, leave_one_out, pool
from daq.estimate.statement import Statement, statement
from daq.scale.job import Job
from daq.scale.nights import SHARED
from daq.scale.study import Runner, carry_out, draws_of
from daq.storage.elsewhere import stamp_of

KERNEL = "daq.scale.nights:night"
HOMOGENEOUS_P = 0.05  # Welch's p below which the headline is the one with scatter between nights


@dataclass(frozen=True, slots=True, kw_only=True)
class Pool:
    """Runs taken together: `pooled` of all, each night against the others, and the headline.

    `homogeneous`: the nights agree by Welch's test; then the headline is the mean weighted by counts, else
    the one with a scatter between nights. The rule is fixed: never the narrower of the two. `hidden`: the
    runs are blinded, so kappa is moved by their common offset and there is no `limit`.
    """

    runs: tuple[str, ...]
    nights: dict[str, list[float]]
    pooled: Pooled
    against: tuple[LeftOut, ...]
    shared: dict[str, int]
    homogeneous: bool
    hidden: bool
    limit: Statement | None

    @property
    def headline(self) -> tuple[float, float, tuple[float, float]]:
        """Kappa, its standard error and the 95 % interval."""
        if self.homogeneous or self.pooled.random_interval_95 is None:
            return self.pooled.value, self.pooled.se, self.pooled.interval_95
        return self.pooled.random_value, self.pooled.random_se, self.pooled.random_interval_95

    def to_json(self) -> dict[str, Any]:
        """Return plain lists and numbers by name."""
        kappa, se, interval = self.headline
        return {
            "kappa": kappa,
            "kappa_se": se,
            "interval_95": list(interval),
            "homogeneous": self.homogeneous,
            "hidden": self.hidden,
            "shared": self.shared,
            "limit": None if self.limit is None else self.limit.to_json(),
            "pooled": {**asdict(self.pooled), "weights": self.pooled.weights.tolist()},
            "nights": [
                {"run": run, **{name: column[at] for name, column in self.nights.items()}, **asdict(left)}
                for at, (run, left) in enumerate(zip(self.runs, self.against, strict=True))
            ],
        }


def pool_runs(runs: Sequence[str], runner: Runner, folder: Path) -> Pool:
    """Return runs taken together; `folder` keeps the figures of each, once for each version of the program.

    Raises
    ------
    DescriptionError
        For fewer than two runs, the same one twice, or runs that are hidden by different offsets.
    StorageError
        With a sentence for every run that cannot be read.
    """
    if len(runs) < 2 or len(set(runs)) < len(runs):
        raise DescriptionError(("tercet pool: name two runs or more, each once.",))
    job = _job(tuple(runs))
    found = carry_out(job, folder, 1, runner)
    if found.failed:
        raise StorageError("\n".join(_why(runs[one.first], one.why) for one in found.failed))
    columns = {name: column[:, 0] for name, column in draws_of(job, folder).items()}
    return _pooled(tuple(runs), columns)


def _job(runs: tuple[str, ...]) -> Job:
    """Return the job of reading runs; the names of its columns come from the first that can be read."""
    columns = ("kappa", "kappa_se", "dof", "kappa_counting_se", "pairs", "visits", "hidden_by")
    loads = tuple(f"{name}_{what}" for name in SHARED.values() for what in ("load", "of"))
    told = json.dumps({"runs": runs, "stamps": [stamp_of(run) for run in runs]})
    return Job(KERNEL, told, 0, len(runs), (*columns, *loads))


def _why(run: str, why: str) -> str:
    sentence = why.removeprefix("StorageError: ")
    return sentence if run in sentence else f"{run}: {sentence}"


def _pooled(runs: tuple[str, ...], columns: dict[str, NDArray[np.float64]]) -> Pool:
    hidden = set(columns["hidden_by"].tolist())
    if len(hidden) > 1:
        raise DescriptionError(
            ("tercet pool: the runs are hidden by different offsets, or some are open. Reveal them first.",)
        )
    kappa, se, dof = (columns[name] for name in ("kappa", "kappa_se", "dof"))
    shared, loads = _shared(columns)
    together = pool(kappa, se, dof, columns["kappa_counting_se"] ** -2, loads if len(loads) else None)
    homogeneous = together.welch_p >= HOMOGENEOUS_P
    value, error = (
        (together.value, together.se) if homogeneous else (together.random_value, together.random_se)
    )
    freedom = together.dof if homogeneous else float(len(runs) - 1)
    blind = hidden != {0.0}
    return Pool(
        runs=runs,
        nights={
            name: columns[name].tolist()
            for name in ("kappa", "kappa_se", "dof", "kappa_counting_se", "pairs")
        },
        pooled=together,
        against=leave_one_out(kappa, se, dof, 0.0 if homogeneous else together.tau),
        shared=shared,
        homogeneous=homogeneous,
        hidden=blind,
        limit=None if blind else statement(value, error, freedom),
    )


def _shared(columns: dict[str, NDArray[np.float64]]) -> tuple[dict[str, int], NDArray[np.float64]]:
    """Return how many nights share each cause, and a column of loads by night for every cause."""
    loads, shared = [], dict[str, int]()
    for line, name in SHARED.items():
        load, owner = columns[f"{name}_load"], columns[f"{name}_of"]
        for one in np.unique(owner[load > 0]).tolist():
            of = (owner == one) & (load > 0)
            loads.append(np.where(of, load, 0.0))
            shared[line] = shared.get(line, 0) + int(of.sum())
    return shared, np.array(loads).reshape(len(loads), -1)
