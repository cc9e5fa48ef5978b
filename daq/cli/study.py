"""The command study: many nights, made up or rehearsed, drawn once each and told in one table."""

from __future__ import annotations

import argparse
import re
import sys
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path

from daq.cli.answer import Answer
from daq.errors import DescriptionError
from daq.scale.described import read_study
from daq.scale.job import Job, job_of
from daq.scale.study import Found, Runner, carry_out, here

EVERY_S = 1.0


def study(arguments: argparse.Namespace) -> Answer:
    """Draw what is missing of a study and tell what all its draws say."""
    if arguments.workers < 0:
        raise DescriptionError(("--workers: give 0 for this process alone, or how many workers.",))
    described, variants = read_study(arguments.file)
    into = arguments.into or Path("studies") / described.name
    answers = []
    with runner(arguments.workers, arguments.cluster) as run:
        for told, parameters in variants.items():
            job = job_of(described.kernel, parameters, described.seed, arguments.draws or described.draws)
            folder = into / re.sub(r"[^A-Za-z0-9.+-]+", "-", told)
            answers.append(_answer(job, folder, arguments.block or described.block, run, told))
    if not described.vary:
        return answers[0]
    return Answer(
        max(one.status for one in answers),
        {"ok": all(one.figures["ok"] for one in answers), "variants": [one.figures for one in answers]},
        list(_compared(answers)),
    )


def _answer(job: Job, folder: Path, block: int, run: Runner, told: str) -> Answer:
    """Return what one study found; `told` says what is varied."""
    began_s = time.monotonic()
    found = carry_out(job, folder, block, run, progress_of(job.draws, f"draws  {told}"))
    figures = _figures(found, job, folder, time.monotonic() - began_s)
    named = ({"variant": told}, [told]) if told else ({}, [])
    return Answer(1 if found.failed else 0, named[0] | figures, [*named[1], *_lines(found, job, folder)])


@contextmanager
def runner(workers: int, address: str | None) -> Iterator[Runner]:
    """Give what draws blocks: this process, workers of its own, or a cluster at an address."""
    if not workers and address is None:
        yield here
        return
    from daq.scale.cluster import Cluster

    with Cluster(workers, address) as cluster:
        yield cluster


def progress_of(wanted: int, what: str) -> Callable[[int], None]:
    """Return what tells on a terminal how many of so many are done, at most once a second."""
    told_s = float("-inf")

    def progress(done: int) -> None:
        nonlocal told_s
        if sys.stderr.isatty() and (time.monotonic() - told_s > EVERY_S or done == wanted):
            told_s = time.monotonic()
            end = "\n" if done == wanted else ""
            print(f"\r{done} of {wanted} {what}", end=end, file=sys.stderr, flush=True)

    return progress


def _figures(found: Found, job: Job, folder: Path, took_s: float) -> dict[str, object]:
    return {
        "ok": not found.failed,
        "study": job.key,
        "folder": str(folder),
        "draws": job.draws,
        "done": found.done,
        "digest": found.digest,
        "columns": found.figures,
        "failed": [{"first": one.first, "count": one.count, "why": one.why} for one in found.failed],
        "took_s": took_s,
    }


def _compared(answers: Sequence[Answer]) -> Iterator[str]:
    """Tell one column after the other, a line for each variant."""
    yield from (line for one in answers for line in one.lines if one.figures["failed"])
    for name in {name: None for one in answers for name in one.figures["columns"]}:
        yield f"{name:<40}{'mean':>14}{'± its error':>12}{'sd':>12}"
        for one in answers:
            column = one.figures["columns"].get(name, {"mean": None})
            yield f"  {one.figures['variant']:<38}{_mean(column)}"
    for one in answers:
        yield f"{one.figures['variant']}: digest {one.figures['digest']}"


def _mean(column: Mapping[str, float | None]) -> str:
    number, mean, sd = (column.get(name) for name in ("number", "mean", "sd"))
    if mean is None or not number:
        return f"{'':>14}"
    error = f"{sd / number**0.5:.2g}" if sd is not None else ""
    spread = f"{sd:.4g}" if sd is not None else ""
    return f"{mean:>14.5g}{error:>12}{spread:>12}"


def _lines(found: Found, job: Job, folder: Path) -> Iterator[str]:
    for one in found.failed:
        yield f"draws {one.first} to {one.first + one.count - 1} failed: {one.why}"
    if found.digest is None:
        yield f"{found.done} of {job.draws} draws are done; they are kept in {folder}"
        return
    yield f"{job.draws} draws, kept in {folder}"
    yield f"{'':<26}{'number':>10}{'mean':>14}{'± its error':>12}{'sd':>12}{'least':>14}{'most':>14}"
    for name, column in found.figures.items():
        least, most = column["least"], column["most"]
        ends = "" if least is None or most is None else f"{least:>14.5g}{most:>14.5g}"
        yield f"{name:<26}{column['number']:>10.0f}{_mean(column)}{ends}"
    yield f"digest {found.digest}"
