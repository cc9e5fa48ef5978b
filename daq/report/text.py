"""The report as text: what a person reads first in the morning."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from daq.estimate.blinding import Blinding
from daq.estimate.stopping import ONCE, WHOLE_NIGHT
from daq.report.account import account_lines
from daq.report.closing import closing_lines, ending_lines
from daq.report.geometry import geometry_lines
from daq.report.numbers import number, signed, with_error


def lines(figures: Mapping[str, Any]) -> list[str]:
    """Return the report of a run as lines of text; what is not known is left out or said.

    Parameters
    ----------
    figures
        What `summary` gave.
    """
    account = account_lines(figures)
    closing = closing_lines(figures)
    geometry, residual = geometry_lines(figures), _residual(figures)
    if geometry:
        residual = ["Nothing of the slits accounted for:", *residual]
    parts = (
        _head(figures),
        geometry,
        residual,
        closing,
        account,
        _warnings(figures),
        _visits(figures),
        _archive(figures),
    )
    return [line for part in parts if part for line in (*part, "")][:-1]


def _truth(value: float, se: float) -> str:
    """Return the truth; a rounding error of the arithmetic is none."""
    return "0" if abs(value) < 1e-6 * se else signed(value)


def _head(figures: Mapping[str, Any]) -> list[str]:
    kind = {
        "rehearsal": "A rehearsal on simulated hardware.",
        "replay": "A replay of an archived run.",
        "import": "Visits that were made elsewhere.",
    }
    title = figures["title"] or figures["name"]
    return [
        *_damage(figures),
        f"{title} ({figures['name']})",
        *([kind[figures["kind"]]] if figures["kind"] in kind else []),
    ]


def _damage(figures: Mapping[str, Any]) -> list[str]:
    """Return what is lost of a damaged archive, before anything that rests on the rest."""
    if not figures["damaged"]:
        return []
    then = figures["recorded_kappa"]
    recorded = "" if then is None else f" When it was finished, kappa was {signed(then)}."
    return [
        "DAMAGED: a part of this archive is lost. What follows rests on what is good, not on the whole run."
        + recorded,
        *(f"! {one}." for one in figures["damaged"]),
        "",
    ]


def _residual(figures: Mapping[str, Any]) -> list[str]:
    if figures["kappa_se"] is None:
        return [
            f"No residual yet: complete pairs of laps so far {figures['pairs']}; an error bar needs two.",
            *_unmeasured(figures),
        ]
    if not figures["printable"]:
        return [
            "The pairwise terms are too small to divide by: the plain residual is given instead of kappa.",
            f"epsilon = {signed(figures['epsilon'])} ± {figures['epsilon_se']:.3g} per second",
        ]
    if Blinding(figures["blinding"]).hides:
        return _moved(figures)
    found = [
        f"kappa = {with_error(figures['kappa'], figures['kappa_se'])} "
        f"(jackknife over {figures['pairs']} pairs; {figures['normalisation']} normalisation)",
        f"95 % interval, if read once at the planned end: {_interval(figures['interval_95'])}",
        f"95 % over the whole night, whatever you do:     {_interval(figures['whole_night_95'])}",
        f"counting alone would give ± {figures['kappa_counting_se']:.2e}; "
        f"excess {figures['excess']:.2f} ± {figures['excess_se']:.2f}",
        *_planned(figures),
        *_zero(figures),
    ]
    if figures["truth_kappa"] is not None:
        off = (figures["kappa"] - figures["truth_kappa"]) / figures["kappa_se"]
        truth = _truth(figures["truth_kappa"], figures["kappa_se"])
        found.append(f"simulated truth {truth}: off by {number(off, '.2f')} standard errors")
    return found


def _unmeasured(figures: Mapping[str, Any]) -> list[str]:
    missing = figures.get("openings_missing", ())
    return [f"Never measured: {', '.join(missing)}. The residual needs every opening."] if missing else []


def _visits(figures: Mapping[str, Any]) -> list[str]:
    share = figures["live_fraction"]
    live = f", {100 * share:.1f} % of the time live" if share is not None else ""
    return [
        f"{figures['visits_done']} of {figures['visits_planned']} visits done, "
        f"{figures['visits_missing']} missing, {figures['visits_repeated']} repeated",
        f"{figures['stands_left_out']} stands left out, {figures['visits_not_used']} visits not used",
        f"{figures['run_s'] / 3600:.2f} h from first to last gate{live}",
        *ending_lines(figures),
    ]


def _warnings(figures: Mapping[str, Any]) -> list[str]:
    found = figures.get("warnings") or ()
    doubt = " (kappa is in doubt until somebody has looked)"
    said = [f"{one['text']}{doubt if one['in_doubt'] else ''}" for one in found]
    return ["Warnings at the end", *said] if said else []


def _archive(figures: Mapping[str, Any]) -> list[str]:
    return [f"archive {figures['run']}", f"digest  {figures['digest']}"]


def _interval(interval: tuple[float, float] | None) -> str:
    return "not yet" if interval is None else f"{signed(interval[0])} to {signed(interval[1])}"


def _moved(figures: Mapping[str, Any]) -> list[str]:
    """Return what may be said while blinded: no zero, no limit, nothing that a zero could be read from."""
    return [
        f"This run is blinded ({figures['blinding']}): kappa is moved by a hidden offset and rounded.",
        f"kappa + offset = {signed(figures['kappa'])} ± {figures['kappa_se']:.1e} "
        f"(jackknife over {figures['pairs']} pairs)",
        f"95 % interval of that, if read once at the planned end: {_interval(figures['interval_95'])}",
        f"95 % over the whole night, whatever you do:             {_interval(figures['whole_night_95'])}",
        f"counting alone would give about ± {figures['kappa_counting_se']:.1e}",
    ]


def _planned(figures: Mapping[str, Any]) -> list[str]:
    """Return what the plan said of the bar, beside what came out; only of a plan that was carried out."""
    planned = figures.get("planned_se")
    if planned is None or figures["visits_missing"]:
        return []
    return [f"the plan said ± {planned:.2e}: what came out is {figures['kappa_se'] / planned:.2f} of it"]


def _zero(figures: Mapping[str, Any]) -> list[str]:
    """Return where zero lies, by the band that the end of the run leaves to be read."""
    once = (figures.get("stop") or {"band": WHOLE_NIGHT})["band"] == ONCE
    ends = figures["interval_95" if once else "whole_night_95"]
    if ends is None:
        return []
    band = "95 % interval" if once else "whole-night band, which is the one to read here"
    return [f"zero lies {'inside' if ends[0] <= 0 <= ends[1] else 'outside'} the {band}"]
