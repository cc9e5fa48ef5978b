"""Monitor: whether what watches the source sees anything of the mask, bends, and how far to believe it.

Whether it is linear takes attenuators that a person puts in (`[by_hand]` of the rig).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np
from scipy.stats import f as f_distribution

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, counts_only, once
from daq.tasks.levels import Bend, bend_of, level_visits
from daq.tasks.panels import Curve, Panel
from daq.tasks.stands import by_stand, there_and_back
from daq.tasks.turns import told_once
from daq.tasks.verdicts import ODD_P, Verdict, worst

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
    channel = setting.measurement.estimate.monitor_channel
    assert channel is not None  # `lacks` has seen to it
    stands = [one for one in taken if one[0].role.isdecimal()]
    seen = _seen(setting, by_stand(setting, stands, lambda reading: max(reading.values[channel], 0.5)))
    levels = bend_of(setting, taken, channel)
    bend, bend_se = (None, None) if levels is None else (levels[0].share, levels[0].se)
    return Outcome(
        values={"by_opening": _named(seen, seen.mean), "exponent": seen.exponent, "p": seen.p, "bend": bend},
        se={"by_opening": _named(seen, seen.se), "bend": bend_se},
        verdict="fail" if seen.mask else worst("pass" if seen.known else "doubtful", _straight(levels)),
        sentence=_sentence(setting, seen, levels),
        model="mean log by opening within stands",
        panels=(_panel(seen), *(() if levels is None else (levels[1],))),
        chi2=seen.chi2,
        dof=len(seen.names) - 1,
    )


@dataclass(frozen=True, slots=True)
class _Seen:
    """What the monitor sees of the mask: mean log by opening, and how improbable that is by chance."""

    names: Sequence[str]
    mean: FloatArray
    se: FloatArray
    chi2: float
    p: float
    exponent: float
    known: bool  # well enough to be used visit by visit

    @property
    def mask(self) -> bool:
        """Whether it sees anything of the mask."""
        return self.p < ODD_P


def _seen(setting: Setting, counts: FloatArray) -> _Seen:
    """Return what counts of the monitor by stand and opening (stands, K) say."""
    masks = list(setting.rig.opening_masks)
    mean, se = by_opening(np.log(counts))
    chi2 = float(np.sum((mean / se) ** 2) * (len(masks) - 1) / len(masks))
    dof = len(masks) - 1  # told against the mean of a stand: one less
    strength, counting_var = np.log(counts.sum(axis=1)), float(np.mean(1 / counts.sum(axis=1)))
    source_var = max(float(np.var(np.diff(strength)) / 2 - counting_var), 0.0)
    return _Seen(
        names=[openings.name(mask) for mask in masks],
        mean=mean,
        se=se,
        chi2=chi2,
        p=float(f_distribution.sf(chi2 / dof, dof, (STANDS // 2 - 1) * dof)),
        exponent=exponent(source_var, counting_var),
        known=float(se.max()) <= setting.yardstick.rate_error,
    )


def _named(seen: _Seen, values: FloatArray) -> dict[str, float]:
    return dict(zip(seen.names, values.tolist(), strict=True))


def _sentence(setting: Setting, seen: _Seen, levels: tuple[Bend, Panel] | None) -> str:
    most = int(np.argmax(np.abs(seen.mean)))
    by_stand = "so divide by the mean of a stand, not visit by visit"
    how = "so it may be used visit by visit" if seen.known else by_stand
    return (
        f"The monitor sees {'something' if seen.mask else 'nothing'} of the mask (p = {seen.p:.2g}; most at "
        f"{seen.names[most]}, {1e4 * seen.mean[most]:+.1f} +- {1e4 * seen.se[most]:.1f} in 1e4; "
        f"{1e4 * setting.yardstick.rate_error:.1f} wanted): {how}; {_bent(levels)}."
    )


def _panel(seen: _Seen) -> Panel:
    points = Curve(np.arange(len(seen.names), dtype=float), 1e4 * seen.mean, "monitor", 1e4 * seen.se)
    title = "The monitor by opening, against its stand"
    return Panel(title, "opening", "log, in 1e4", (points,), names=seen.names)


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
