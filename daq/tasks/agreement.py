"""Agreement: a dead time by sums and by gaps, whether they agree, and what is said of them."""

from __future__ import annotations

from dataclasses import dataclass
from math import hypot, sqrt

from daq.tasks.contract import Setting
from daq.tasks.crossings import Sums
from daq.tasks.gaps import Gaps
from daq.tasks.said import of_allowed, with_error
from daq.tasks.verdicts import Verdict, fits, within, worst

LARGEST_LOSS = 0.05
FINE = 0.05  # error over dead time that is aimed at, where the dead time itself is wanted
APART = 3.0  # standard errors: sums and gaps that lie farther apart do not agree


@dataclass(frozen=True, slots=True)
class Found:
    """What sums of so much time at the bench say, and what gaps say where the counter tells them."""

    sums: Sums
    gaps: Gaps | None
    sums_took_s: float = 0.0

    @property
    def apart(self) -> float:
        """By how many standard errors sums lie above gaps; 0 without gaps."""
        return 0.0 if self.gaps is None else self.apart_s / hypot(self.sums.se_s, self.gaps.se_s)

    @property
    def apart_s(self) -> float:
        """By how much sums lie above gaps."""
        return 0.0 if self.gaps is None else self.sums.tau_s - self.gaps.tau_s

    @property
    def best(self) -> tuple[float, float]:
        """The dead time to correct with, and its error: of both where they agree, else of the sums."""
        if self.gaps is None or abs(self.apart) > APART:
            return self.sums.tau_s, self.sums.se_s
        share = self.sums.se_s**2 / (self.sums.se_s**2 + self.gaps.se_s**2)  # of gaps
        return self.sums.tau_s - share * self.apart_s, self.gaps.se_s * sqrt(share)


def kappa_shift(setting: Setting, found: Found) -> float:
    """Return what an error of the dead time by one standard error does to kappa."""
    return abs(setting.yardstick.per_dead_time) * found.best[1]


def budget_s(found: Found) -> float | None:
    """Return how long sums would have to be taken for an error of a twentieth; None where nothing is seen."""
    (tau, se) = found.sums.tau_s, found.sums.se_s
    return found.sums_took_s * (se / (FINE * tau)) ** 2 if tau > APART * se else None


def verdict_of(setting: Setting, found: Found) -> Verdict:
    """Return the verdict on losses, error, agreement with what is described and of sums with gaps."""
    (tau, se), yardstick = found.best, setting.yardstick
    loss = within(yardstick.brightest_hz * abs(tau), yardstick.brightest_hz * se, LARGEST_LOSS)
    allowed: Verdict = "pass" if kappa_shift(setting, found) <= yardstick.allowed else "fail"
    told = setting.measurement.estimate.dead_time_s
    as_told: Verdict = "pass" if abs(tau - told) <= APART * se else "doubtful"
    even: Verdict = "pass" if found.gaps is None else fits(found.gaps.chi2, found.gaps.dof)
    return worst(loss, allowed, as_told, even, _agrees(setting, found))


def _agrees(setting: Setting, found: Found) -> Verdict:
    """Return "fail" where sums and gaps disagree by what moves kappa more than one defect may."""
    if abs(found.apart) <= APART:
        return "pass"
    return "doubtful" if _moved(setting, found) <= setting.yardstick.allowed else "fail"


def _moved(setting: Setting, found: Found) -> float:
    """Return by how much kappa moves between the dead time of sums and that of gaps."""
    return abs(setting.yardstick.per_dead_time * found.apart_s)


def sentence_of(setting: Setting, found: Found) -> str:
    """Return what was found, and what gaps and sums say of one another."""
    (tau, se), told = found.best, setting.measurement.estimate.dead_time_s
    lost = 100 * setting.yardstick.brightest_hz * tau
    shift = of_allowed(kappa_shift(setting, found), setting.yardstick.allowed)
    said = (
        f"The dead time is {with_error(1e9 * tau, 1e9 * se)} ns ({1e9 * told:.3g} described); its error "
        f"moves kappa by {shift}, and at the brightest place {lost:.2g} % of the counts are lost."
    )
    return " ".join((said, *_budget(found), *_agreement(setting, found)))


def _budget(found: Found) -> list[str]:
    """Return what an error of a twentieth would take, where there is none."""
    needed_s = budget_s(found)
    if needed_s is None or found.best[1] <= FINE * found.best[0]:
        return []
    return [
        f"An error of {100 * FINE:.0f} % would take {needed_s / 3600:.1f} h of this; a counter in list mode "
        f"needs far less."
    ]


def _agreement(setting: Setting, found: Found) -> list[str]:
    if found.gaps is None:
        return []
    both = (
        f"{with_error(1e9 * found.sums.tau_s, 1e9 * found.sums.se_s)} ns by sums, "
        f"{with_error(1e9 * found.gaps.tau_s, 1e9 * found.gaps.se_s)} ns by {found.gaps.number} gaps"
    )
    said = [f"Sums and gaps agree: {both}."]
    if abs(found.apart) > APART:
        moved = of_allowed(_moved(setting, found), setting.yardstick.allowed)
        said = [
            f"Sums and gaps disagree by {abs(found.apart):.1f} standard errors: {both}, which moves kappa by "
            f"{moved}. Something beside the dead time changes the counts with the rate: look at the pulse "
            f"height and the threshold."
        ]
    if fits(found.gaps.chi2, found.gaps.dof) != "pass":
        said.append(
            f"Gaps are not those of an even rate ({100 * found.gaps.soon:+.2g} +- "
            f"{100 * found.gaps.soon_se:.1g} % of the counts come too soon after another): look for "
            f"afterpulses, ringing and room light."
        )
    return said
