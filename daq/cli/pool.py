"""The command pool: archived runs estimated anew and taken together."""

from __future__ import annotations

import argparse
from collections.abc import Iterator
from pathlib import Path

from daq.cli.answer import Answer
from daq.cli.study import progress_of, runner
from daq.estimate.positions import PositionTests
from daq.scale.kept import Kept, usual_folder
from daq.scale.pool import Pool, pool_runs

ODD = 0.05


def pool(arguments: argparse.Namespace) -> Answer:
    """Estimate runs anew, wherever they lie, and take them together."""
    if arguments.picture is not None:
        from daq.report.forest import check_ending

        check_ending(arguments.picture)
    kept = Kept(arguments.into or usual_folder())
    with runner(arguments.workers, arguments.cluster) as run:
        found = pool_runs(arguments.run, run, kept, progress_of(len(arguments.run), "runs"))
    if arguments.picture is not None:
        _draw(found, arguments.picture)
    where = {"kept_in": None if kept.trouble else str(kept.folder)}
    return Answer(0, found.to_json() | where, [*_by_night(found), *_together(found), _read(found, kept)])


def _read(found: Pool, kept: Kept) -> str:
    told = f"{found.read} of {len(found.runs)} runs were read"
    if kept.trouble:
        return f"{told}; nothing can be kept in {kept.folder} ({kept.trouble}): --into names another folder"
    return f"{told}; what all of them say is kept in {kept.folder}"


def _draw(found: Pool, path: Path) -> None:
    from daq.report.forest import Line, draw_forest

    columns = (found.nights[name] for name in ("kappa", "kappa_se", "dof"))
    each = zip(
        map(_short, found.runs), *columns, found.pooled.weights.tolist(), (left.p for left in found.against),
        strict=True,
    )  # fmt: skip
    together = [("by counts", found.pooled.value, found.pooled.interval_95)]
    if found.pooled.random_interval_95 is not None:
        together.append(("with scatter", found.pooled.random_value, found.pooled.random_interval_95))
    if not found.by_counts:
        together.reverse()
    agree = "agree" if found.homogeneous else "differ"
    title = f"{len(found.runs)} nights, {agree} (Welch's p = {found.pooled.welch_p:.2g})"
    draw_forest(path, [Line(*one) for one in each], together, title, zero=not found.hidden)


def _name(found: Pool) -> str:
    return "kappa + offset" if found.hidden else "kappa"


def _by_night(found: Pool) -> Iterator[str]:
    """Tell each night beside all the others."""
    yield f"{'':<44}{_name(found):>14}{'± its error':>13}{'weight':>8}{'others':>12}{'z':>7}{'p':>7}"
    nights = zip(found.runs, found.against, found.pooled.weights.tolist(), strict=True)
    for at, (run, left, weight) in enumerate(nights):
        kappa, se = (found.nights[column][at] for column in ("kappa", "kappa_se"))
        mark = "  <-- look at this" if left.p < ODD else ""
        yield (
            f"{_short(run):<44}{kappa:>+14.3e}{se:>13.2e}{weight:>8.3f}{left.others:>+12.2e}"
            f"{left.z:>+7.2f}{left.p:>7.2f}{mark}"
        )


def _together(found: Pool) -> Iterator[str]:
    """Tell whether the nights agree, and what they say together."""
    one, name = found.pooled, _name(found)
    yield f"do the nights agree? Welch's p = {one.welch_p:.2g} (as if the errors were known: {one.q_p:.2g})"
    for cause, many in found.shared.items():
        yield f"{cause}: one cause for {many} nights, added to the error once and not night by night"
    kappa, se, (low, high) = found.headline
    why = "by counts" if found.by_counts else f"with a scatter of {one.tau:.2e} between nights"
    told = f"{name} = {kappa:+.3e} ± {se:.2e} ({len(found.runs)} nights, {why})"
    yield f"{told}; 95 %: {low:+.3e} to {high:+.3e}"
    if found.homogeneous and one.random_interval_95 is not None:
        low, high = one.random_interval_95
        yield f"were there a scatter between nights: {one.random_value:+.3e}; 95 %: {low:+.3e} to {high:+.3e}"
    if found.by_counts and not found.homogeneous:
        yield "two nights that disagree do not say how far nights scatter: this bar is too short; add nights"
    if found.positions is not None:
        yield _everywhere(found.positions)
    if found.limit is not None:
        yield f"|kappa| < {found.limit.limit:.3g} at 95 % confidence"


def _everywhere(of: PositionTests) -> str:
    told = f"structure by position beside kappa, pairs of all nights: p = {of.combined_p:.2g}"
    return f"{told} (farthest at {of.largest_mm:g} mm, {of.largest_t:+.1f}, p = {of.largest_sidak_p:.2g})"


def _short(run: str) -> str:
    return run.rstrip("/").rpartition("/")[2].removesuffix(".zip")[:43]
