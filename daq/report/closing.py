"""What a report says at the end of a run: how it ended, the limit of kappa, the tests of every position."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

ODD = 0.01


def ending_lines(figures: Mapping[str, Any]) -> list[str]:
    """Return how a run ended and who could see kappa then; nothing while it goes on."""
    stop = figures.get("stop")
    if not stop:
        return [f"ended: {figures['ended']}"] if figures["ended"] else []
    sight = "could be seen" if stop["kappa_visible"] else "was hidden"
    by = "" if stop["who"] == "the plan" else f" by {stop['who']}"
    said = [f"ended: {stop['reason']}{by}, after {stop['pairs']} complete pairs; kappa {sight} meanwhile"]
    return [*said, stop["remark"]] if stop["remark"] else said


def closing_lines(figures: Mapping[str, Any]) -> list[str]:
    """Return the limit and the position tests, each said once; nothing before the end."""
    return [*_limit(figures), *_positions(figures.get("positions"))]


def _limit(figures: Mapping[str, Any]) -> Iterator[str]:
    found = figures.get("statement")
    if not found:
        return
    low, high = (
        f"{end:+.2e}".replace("-", "−", 1) if end < 0 else f"{end:+.2e}" for end in found["interval_90"]
    )
    stop = figures.get("stop") or {"kind": "planned"}
    how = "planned stop" if stop["kind"] == "planned" else f"stop: {stop['kind']}"
    looked = "blinded until revealed" if figures["blinding"] == "revealed" else "not blinded"
    yield (
        f"|kappa| < {found['limit']:.2e} at 95 % confidence (90 % interval {low} to {high}, "
        f"{figures['pairs']} pairs, {how}, {looked})"
    )
    yield f"if kappa is zero, such a run gives a limit of about {found['sensitivity']:.2g}"


def _positions(found: Mapping[str, Any] | None) -> Iterator[str]:
    if not found:
        return
    yield "Structure by position beside kappa (one test, at the end; pairs turned over at random)"
    yield f"all positions together: p = {found['chi2_p']:.2g}"
    yield (
        f"largest at {found['largest_mm']:g} mm, t = {found['largest_t']:+.2f}: p = {found['largest_p']:.2g} "
        f"(among all positions by Student's t: {found['largest_sidak_p']:.2g})"
    )
    if found["fourier_p"] is not None:
        yield f"strongest ripple, period {found['period_mm']:.3g} mm: p = {found['fourier_p']:.2g}"
    mark = "  <-- look at this" if found["combined_p"] < ODD else ""
    yield f"the three together: p = {found['combined_p']:.2g}{mark}"
