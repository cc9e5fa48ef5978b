"""Methods: the paragraph for a paper, filled from the record; a sentence that lacks a number is left out."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from daq.report.facts import all_said

SENTENCES = (
    "Counts were recorded for all {counted.openings} combinations of open slits (mask {set_up.chip}) at "
    "{counted.positions} detector positions from {counted.first_mm:g} to {counted.last_mm:g} mm, "
    "{set_up.distance_m:g} m behind the mask.",
    "The wavelength was {set_up.wavelength_m*1e9:g} nm.",
    "The slits were {counted.width_um:g} um wide, {counted.pitch_um:g} um apart.",
    "The combinations were measured one after another at each position, in the order {settings.order}, so "
    "that slow drift of the source cancels ({planned_pairs} pairs of laps planned, {visits_planned} visits).",
    "{visits_done} visits were done; the counter was live {live_s*0.000277777777777778:.2f} h of "
    "{run_s*0.000277777777777778:.2f} h.",
    "The run lasted from {started_utc} to {ended_utc} (UTC).",
    "The source changed by {level.range_pc:.1f} % peak to peak.",
    "Counts were corrected visit by visit for a {settings.dead_time_kind} dead time of "
    "{settings.dead_time_s*1e9:g} +- {settings.dead_time_u_s*1e9:g} ns.",
    "{stands_left_out} of {counted.stands} stands were excluded by criteria fixed before the run.",
    "Including them gives kappa = {kappa_with_excluded*1e4:+.2f} x 1e-4.",
    "The third-order term, in the {normalisation} normalisation, weighted over positions with weights fixed "
    "before the first count, is {told} (standard error from a delete-one jackknife over {pairs} pairs).",
    "Counting alone gives a standard error of {kappa_counting_se*1e4:.3f} x 1e-4.",
    "The 95 % interval (Student t, read once at the planned end) is {once.low*1e4:+.2f} to "
    "{once.high*1e4:+.2f} in units of 1e-4.",
    "With the systematic contributions that are known the total standard error is "
    "{account.budget.total_se*1e4:.3f} x 1e-4.",
    "{blinded}",
    "The program was {software.name} {software.version}.",
    "Its source was commit {software.commit:.12}.",
)


def methods(facts: Mapping[str, Any]) -> str:
    """Return the methods paragraph; only what the record holds is said."""
    return " ".join(all_said(facts, SENTENCES))
