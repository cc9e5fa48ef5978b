"""Pooling archived runs: estimated anew one by one, then taken together, with how far they agree."""

from __future__ import annotations

import json
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.errors import DescriptionError, StorageError
from daq.estimate.pooling import LeftOut, Pooled, leave_one_out, pool
from daq.estimate.positions import PositionTests
from daq.estimate.statement import Statement, statement
from daq.scale.everywhere import everywhere
from daq.scale.job import Job
from daq.scale.kept import Kept
from daq.scale.nights import SHARED, Night
from daq.scale.study import Failed, Runner
from daq.storage.elsewhere import facts_of

KERNEL = "daq.scale.nights:night"
HOMOGENEOUS_P = 0.05  # Welch's p below which the headline is the one with scatter between nights
FIGURES = ("kappa", "kappa_se", "dof", "kappa_counting_se", "pairs")


@dataclass(frozen=True, slots=True, kw_only=True)
class Pool:
    """Runs taken together: `pooled` of all, each night against the others, and the headline.

    `homogeneous`: the nights agree by Welch's test. Then, and with two nights, the headline is the mean
    `by_counts`, else the one with a scatter between nights. The rule is fixed: never the narrower of the two.
    `positions`: tests of every position over the pairs of all nights, where they have the same positions.
    `hidden`: the runs are blinded, so kappa is moved by their common offset and there is no `limit`; nor is
    there one where two nights disagree.
    `read`: of how many runs the visits were read; the others were kept.
    """

    runs: tuple[str, ...]
    nights: dict[str, list[float]]
    pooled: Pooled
    against: tuple[LeftOut, ...]
    shared: dict[str, int]
    homogeneous: bool
    hidden: bool
    limit: Statement | None
    positions: PositionTests | None
    read: int

    @property
    def by_counts(self) -> bool:
        """Whether the headline is the mean weighted by counts."""
        return self.homogeneous or self.pooled.random_interval_95 is None

    @property
    def headline(self) -> tuple[float, float, tuple[float, float]]:
        """Kappa, its standard error and the 95 % interval."""
        one = self.pooled
        if one.random_interval_95 is None or self.by_counts:
            return one.value, one.se, one.interval_95
        return one.random_value, one.random_se, one.random_interval_95

    def to_json(self) -> dict[str, Any]:
        """Return plain lists and numbers by name."""
        kappa, se, interval = self.headline
        return {
            "kappa": kappa,
            "kappa_se": se,
            "interval_95": list(interval),
            "homogeneous": self.homogeneous,
            "by_counts": self.by_counts,
            "hidden": self.hidden,
            "shared": self.shared,
            "limit": None if self.limit is None else self.limit.to_json(),
            "positions": None if self.positions is None else self.positions.to_json(),
            "pooled": {**asdict(self.pooled), "weights": self.pooled.weights.tolist()},
            "read": self.read,
            "nights": [
                {"run": run, **{name: column[at] for name, column in self.nights.items()}, **asdict(left)}
                for at, (run, left) in enumerate(zip(self.runs, self.against, strict=True))
            ],
        }


def pool_runs(
    runs: Sequence[str], runner: Runner, kept: Kept, progress: Callable[[int], None] = lambda done: None
) -> Pool:
    """Return runs taken together; each is read once for each version of the estimator, and `kept`.

    Raises
    ------
    DescriptionError
        For fewer than two runs, the same one twice, at another place or not, or runs that are hidden by
        different offsets.
    StorageError
        With a sentence for every run that cannot be read.
    """
    if len(runs) < 2 or len(set(runs)) < len(runs):
        raise DescriptionError(("tercet pool: name two runs or more, each once.",))
    facts = {run: _facts(run) for run in runs}
    _refuse_doubles(facts)
    found = {run: night for run in runs if (night := kept.get(facts[run])) is not None}
    missing = [run for run in runs if run not in found]
    failed = []
    progress(len(found))
    for run, outcome in _read(missing, runner):
        if isinstance(outcome, str):
            failed.append(outcome)
            continue
        kept.put(facts[run], outcome)
        found[run] = Night.from_bytes(outcome)
        progress(len(found))
    if failed:
        raise StorageError("\n".join(failed).removesuffix("."))
    return _pooled({run: found[run] for run in runs}, len(missing))


def _refuse_doubles(facts: Mapping[str, Mapping[str, Any]]) -> None:
    """Refuse a run that is named by two addresses: its counts would be taken twice."""
    first = dict[str, str]()
    for run, known in facts.items():
        told = str(known.get("digest", run))
        if told in first:
            raise DescriptionError(
                (f"tercet pool: {first[told]} and {run} are one run. Leave one of them out.",)
            )
        first[told] = run


def _facts(run: str) -> Mapping[str, Any]:
    """Return what a run is; nothing where it cannot be read: reading it whole says why."""
    try:
        return facts_of(run)
    except StorageError:
        return {}


def _read(runs: Sequence[str], runner: Runner) -> Iterator[tuple[str, bytes | str]]:
    """Yield runs with their nights as they come home, or with a sentence."""
    job = Job(KERNEL, json.dumps({"runs": runs}), 0, len(runs), ())
    for outcome in runner(job, ((at, 1) for at in range(len(runs)))):
        if isinstance(outcome, Failed):
            run = runs[outcome.first]
            yield run, outcome.why if run in outcome.why else f"{run}: {outcome.why}"
        else:
            (first, _), night = outcome
            yield runs[first], night


def _pooled(of: Mapping[str, Night], read: int) -> Pool:
    nights = list(of.values())
    hidden = {night.hidden_by for night in nights}
    if len(hidden) > 1:
        raise DescriptionError(
            ("tercet pool: the runs are hidden by different offsets, or some are open. Reveal them first.",)
        )
    columns = {name: np.array([night.figures[name] for night in nights]) for name in FIGURES}
    kappa, se, dof = (columns[name] for name in FIGURES[:3])
    shared, loads = _shared(nights)
    together = pool(kappa, se, dof, columns["kappa_counting_se"] ** -2, loads if len(loads) else None)
    homogeneous = together.welch_p >= HOMOGENEOUS_P
    blind = hidden != {""}
    found = Pool(
        runs=tuple(of),
        nights={name: columns[name].tolist() for name in FIGURES},
        pooled=together,
        against=leave_one_out(kappa, se, dof, 0.0 if homogeneous else together.tau),
        shared=shared,
        homogeneous=homogeneous,
        hidden=blind,
        limit=None,
        positions=everywhere(nights),
        read=read,
    )
    return found if blind else replace(found, limit=_limit(found))


def _limit(found: Pool) -> Statement | None:
    """Return what may be said of kappa; None where nights disagree, and are too few to say how far."""
    if found.by_counts and not found.homogeneous:
        return None
    value, error, _ = found.headline
    return statement(value, error, found.pooled.dof if found.by_counts else float(len(found.runs) - 1))


def _shared(nights: Sequence[Night]) -> tuple[dict[str, int], NDArray[np.float64]]:
    """Return how many nights share each cause, and a column of loads by night for every cause."""
    loads, shared = [], dict[str, int]()
    for line, name in SHARED.items():
        load = np.array([night.loads[name] for night in nights])
        owner = np.array([night.owners[name] for night in nights])
        for one in np.unique(owner[load > 0]).tolist():
            of = (owner == one) & (load > 0)
            loads.append(np.where(of, load, 0.0))
            shared[line] = shared.get(line, 0) + int(of.sum())
    return shared, np.array(loads).reshape(-1, len(nights))
