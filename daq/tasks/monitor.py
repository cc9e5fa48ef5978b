"""Monitor: whether what watches the source sees anything of the mask, bends, and how far to believe it.

Whether it is linear takes attenuators that a person puts in (`[by_hand]` of the rig).
"""

from __future__ import annotations

from collections.abc import Sequence
from math import sqrt

import numpy as np
from scipy.stats import f as f_distribution

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.tasks.contract import (
    ODD_P,
    Ask,
    Curve,
    Outcome,
    Panel,
    Setting,
    Taken,
    Task,
    Verdict,
    counts_only,
    once,
    worst,
)
from daq.tasks.levels import Bend, bend_of, level_visits
from daq.tasks.stands import by_stand, there_and_back
from daq.tasks.turns import told_once

DWELL_S, STANDS = 2.0, 40
MOST_BEND = 0.05  # common practice, no source: a bend that all openings share moves kappa by nothing


def by_opening(log_counts: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the mean log of the monitor by opening against its stand, and standard errors, from (stands, K).

    Notes
    -----
    Stands run there and back in turn, so a straight drift cancels between two; the errors are the scatter of
    the means of such pairs, one for all openings: a monitor counts as much whatever is open.
    """
    apart = log_counts - log_counts.mean(axis=1, keepdims=True)
    pairs = (apart[::2] + apart[1::2]) / 2
    scatter = sqrt(float(pairs.var(axis=0, ddof=1).mean()) / len(pairs))
    return pairs.mean(axis=0), np.full(pairs.shape[1], scatter)


def exponent(source_var: float, monitor_var: float) -> float:
    """Return the power of the monitor to divide by that leaves the least noise."""
    return source_var / (source_var + monitor_var) if source_var > 0 else 0.0


def _lacks(setting: Setting) -> Sequence[str]:
    channel = setting.measurement.estimate.monitor_channel
    missing = () if channel is not None else ("the description names no monitor (estimate.monitor_channel).",)
    return (*counts_only(setting), *missing)


def _visits(setting: Setting) -> Sequence[Ask]:
    return told_once([*there_and_back(setting, STANDS, DWELL_S), *level_visits(setting)])


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    masks, channel = list(setting.rig.opening_masks), setting.measurement.estimate.monitor_channel
    assert channel is not None  # `lacks` has seen to it
    stands = [one for one in taken if one[0].role.isdecimal()]
    counts = by_stand(setting, stands, lambda reading: max(reading.values[channel], 0.5))
    levels = bend_of(setting, taken, channel)
    mean, se = by_opening(np.log(counts))
    chi2 = float(np.sum((mean / se) ** 2) * (len(masks) - 1) / len(masks))
    dof = len(masks) - 1  # told against the mean of a stand: one less
    p = float(f_distribution.sf(chi2 / dof, dof, (STANDS // 2 - 1) * dof))
    strength = np.log(counts.sum(axis=1))
    source = max(float(np.var(np.diff(strength)) / 2 - np.mean(1 / counts.sum(axis=1))), 0.0)
    power = exponent(source, float(np.mean(1 / counts.sum(axis=1))))
    known = float(se.max()) <= setting.yardstick.rate_error
    named = [openings.name(mask) for mask in masks]
    largest = int(np.argmax(np.abs(mean)))
    how = (
        "so divide by the mean of a stand, not visit by visit"
        if not known
        else "so it may be used visit by visit"
    )
    return Outcome(
        values={"by_opening": dict(zip(named, mean.tolist(), strict=True)), "exponent": power, "p": p}
        | {"bend": None if levels is None else levels[0].share},
        se={"by_opening": dict(zip(named, se.tolist(), strict=True))}
        | {"bend": None if levels is None else levels[0].se},
        verdict="fail" if p < ODD_P else worst("pass" if known else "doubtful", _straight(levels)),
        sentence=(
            f"The monitor sees {'something' if p < ODD_P else 'nothing'} of the mask (p = {p:.2g}; most at "
            f"{named[largest]}, {1e4 * mean[largest]:+.1f} +- {1e4 * se[largest]:.1f} in 1e4; "
            f"{1e4 * setting.yardstick.rate_error:.1f} wanted): {how}; {_bent(levels)}."
        ),
        model="mean log by opening within stands",
        panels=(
            Panel(
                "The monitor by opening, against its stand",
                "opening",
                "log, in 1e4",
                (Curve(np.arange(len(masks), dtype=float), 1e4 * mean, "monitor", 1e4 * se),),
                names=named,
            ),
            *(() if levels is None else (levels[1],)),
        ),
        chi2=chi2,
        dof=dof,
    )


def _straight(levels: tuple[Bend, Panel] | None) -> Verdict:
    return "pass" if levels is None or abs(levels[0].share) <= MOST_BEND else "doubtful"


def _bent(levels: tuple[Bend, Panel] | None) -> str:
    if levels is None:
        return "whether it is linear was not tested: the rig names no attenuators (by_hand.attenuators)"
    return f"from no light to its top it bends by {100 * levels[0].share:+.2f} +- {100 * levels[0].se:.2f} %"


TASK = Task(
    name="monitor",
    purpose="Whether the monitor sees anything of the mask, and how much of it to believe.",
    days=30,
    holds_for=("chip", "devices"),
    lacks=_lacks,
    asks=once(_visits),
    fit=_fit,
)
