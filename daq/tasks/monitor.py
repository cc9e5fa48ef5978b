"""Monitor: whether what watches the source sees anything of the mask, and how much of it to believe.

Its linearity is not tested here: that takes attenuators.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import sqrt

import numpy as np
from scipy.stats import f as f_distribution

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.tasks.contract import ODD_P, Ask, Curve, Outcome, Panel, Setting, Taken, Task, counts_only

DWELL_S, STANDS = 2.0, 40


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


def _asks(setting: Setting, taken: Sequence[Taken]) -> Sequence[Ask]:
    if taken:
        return ()
    order = list(setting.rig.opening_masks)
    place = setting.yardstick.position_mm
    return [
        Ask(str(stand), DWELL_S, place, opening, beam="open" if setting.shutter else "")
        for stand in range(STANDS)
        for opening in (order if stand % 2 == 0 else order[::-1])
    ]


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    masks, channel = list(setting.rig.opening_masks), setting.measurement.estimate.monitor_channel
    assert channel is not None  # `lacks` has seen to it
    counts = np.zeros((STANDS, len(masks)))
    for ask, reading in taken:
        counts[int(ask.role), masks.index(ask.opening)] = max(reading.values[channel], 0.5)
    mean, se = by_opening(np.log(counts))
    chi2 = float(np.sum((mean / se) ** 2) * (len(masks) - 1) / len(masks))
    dof = len(masks) - 1  # told against the mean of a stand: one less
    p = float(f_distribution.sf(chi2 / dof, dof, (STANDS // 2 - 1) * dof))
    levels = np.log(counts.sum(axis=1))
    source = max(float(np.var(np.diff(levels)) / 2 - np.mean(1 / counts.sum(axis=1))), 0.0)
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
        values={"by_opening": dict(zip(named, mean.tolist(), strict=True)), "exponent": power, "p": p},
        se={"by_opening": dict(zip(named, se.tolist(), strict=True))},
        verdict="fail" if p < ODD_P else "pass" if known else "doubtful",
        sentence=(
            f"The monitor sees {'something' if p < ODD_P else 'nothing'} of the mask (p = {p:.2g}; most at "
            f"{named[largest]}, {1e4 * mean[largest]:+.1f} +- {1e4 * se[largest]:.1f} in 1e4; "
            f"{1e4 * setting.yardstick.rate_error:.1f} wanted): {how}."
        ),
        model="mean log by opening within stands",
        panels=(
            Panel(
                "The monitor by opening, against its stand",
                ", ".join(named),
                "log, in 1e4",
                (Curve(np.arange(len(masks), dtype=float), 1e4 * mean, "monitor", 1e4 * se),),
            ),
        ),
        chi2=chi2,
        dof=dof,
    )


TASK = Task(
    name="monitor",
    purpose="Whether the monitor sees anything of the mask, and how much of it to believe.",
    days=30,
    holds_for=("chip", "devices"),
    lacks=_lacks,
    asks=_asks,
    fit=_fit,
)
