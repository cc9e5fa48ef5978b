"""A study: every draw of a job obtained once, by this process or by workers, and told in one table."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass
from math import fsum, sqrt
from pathlib import Path
from typing import Any

import numpy as np

from daq.errors import DaqError
from daq.scale.job import Job, drawn
from daq.scale.ledger import Ledger

Block = tuple[int, int]  # first draw, how many


@dataclass(frozen=True, slots=True)
class Failed:
    """A block that could not be drawn, and why."""

    first: int
    count: int
    why: str


Outcome = tuple[Block, bytes] | Failed
Runner = Callable[[Job, Iterable[Block]], Iterator[Outcome]]


@dataclass(frozen=True, slots=True)
class Found:
    """What a study found: figures by column, the digest of all draws, and the blocks that failed."""

    figures: dict[str, dict[str, float | None]]
    digest: str | None
    done: int
    failed: tuple[Failed, ...]


def here(job: Job, blocks: Iterable[Block]) -> Iterator[Outcome]:
    """Yield the blocks drawn by this process, one after the other; one that fails is named."""
    for first, count in blocks:
        try:
            yield (first, count), drawn(job, first, count)
        except Exception as error:  # whatever a kernel raises: the other blocks are not to blame
            yield Failed(first, count, why(error))


def why(error: Exception) -> str:
    """Return what a kernel raised, as a sentence where it is one of ours."""
    return str(error) if isinstance(error, DaqError) else f"{type(error).__name__}: {error}"


def carry_out(
    job: Job, folder: Path, block: int, runner: Runner, progress: Callable[[int], None] = lambda done: None
) -> Found:
    """Return what a study found; what an earlier start has drawn is taken from its folder.

    Raises
    ------
    StorageError
        When the folder holds another study, or cannot be written.
    """
    failed = []
    with Ledger(folder, job) as ledger:
        progress(ledger.done)
        for outcome in runner(job, ledger.missing(block)):
            if isinstance(outcome, Failed):
                failed.append(outcome)
                continue
            (first, _), data = outcome
            ledger.put(first, data)
            progress(ledger.done)
        whole = ledger.done == job.draws
        return Found(
            figures=_figures(job, ledger) if whole else {},
            digest=ledger.digest() if whole else None,
            done=ledger.done,
            failed=tuple(failed),
        )


def draws_of(job: Job, folder: Path) -> dict[str, Any]:
    """Return every draw of a finished study by column, (draws, rows)."""
    with Ledger(folder, job) as ledger:
        if ledger.done < job.draws:
            raise DaqError(f"{ledger.done} of {job.draws} draws are done", where=str(folder))
        table = np.concatenate([*ledger.tables()])
    return {name: table[:, :, at] for at, name in enumerate(job.columns)}


def _figures(job: Job, ledger: Ledger) -> dict[str, dict[str, float | None]]:
    """Return number, mean, standard deviation, least and most of every column; sums do not hang on order."""
    return {name: _column(ledger, at) for at, name in enumerate(job.columns)}


def _column(ledger: Ledger, at: int) -> dict[str, float | None]:
    def numbers() -> Iterator[float]:
        for table in ledger.tables():
            column = table[:, :, at].ravel()
            yield from column[np.isfinite(column)].tolist()

    many = sum(1 for _ in numbers())
    if not many:
        return {"number": 0, "mean": None, "sd": None, "least": None, "most": None}
    mean = fsum(numbers()) / many
    squares = fsum((value - mean) ** 2 for value in numbers())
    sd = sqrt(squares / (many - 1)) if many > 1 else None
    return {"number": many, "mean": mean, "sd": sd, "least": min(numbers()), "most": max(numbers())}
