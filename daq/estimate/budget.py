"""Budget: where the error of kappa comes from, from the run's own record, and what would halve each line."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from math import sqrt
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray, added
from daq.estimate.contrast import epsilon_and_delta
from daq.estimate.levels import levels
from daq.estimate.plan import Plan
from daq.estimate.sensitivity import Taken, rate_gradient
from daq.estimate.sums import sums_of
from daq.estimate.tables import Tables, plan_contrast, tables_of
from daq.estimate.visits import Visits

DRIFT_DEGREE = 3  # of the smooth source that the order has to cancel

RANDOM, SYSTEMATIC, PART = "random", "systematic", "part"


@dataclass(frozen=True, slots=True, kw_only=True)
class Line:
    """A standard uncertainty of kappa (None: not known) and its own error, its source, what would halve it.

    `kind`: "random" is what the jackknife sees, "part" is contained in another line, "systematic" is neither.
    """

    name: str
    value: float | None
    value_se: float | None = None
    kind: str
    source: str
    halve: str


@dataclass(frozen=True, slots=True, kw_only=True)
class Budget:
    """Every line, and the total: the jackknife with what it cannot see added in squares."""

    lines: tuple[Line, ...]
    total_se: float | None

    def to_json(self) -> dict[str, Any]:
        """Return plain lists and numbers."""
        return {"lines": [asdict(line) for line in self.lines], "total_se": self.total_se}


@dataclass(frozen=True, slots=True, kw_only=True)
class Known:
    """What the record of a run says beside its counts.

    `dead_time_u_s`; `slit_loads` change of kappa for one standard uncertainty of each slit parameter;
    `place_mm` where the detector's encoder stood by visit (V); `slope_per_mm` of the log of the expected
    rates (J, K).
    """

    dead_time_u_s: float = 0.0
    slit_loads: Mapping[str, float] | None = None
    place_mm: FloatArray | None = None
    slope_per_mm: FloatArray | None = None


def known_of(attributes: Mapping[str, Any], place_mm: FloatArray | None = None) -> Known:
    """Return what the attributes of a run's archive say of it beside its counts."""
    slope = attributes.get("slope_per_mm")
    return Known(
        dead_time_u_s=float(attributes.get("dead_time_u_s", 0.0)),
        slit_loads=attributes.get("slit_loads"),
        place_mm=place_mm,
        slope_per_mm=None if slope is None else np.asarray(slope, float),
    )


def budget(visits: Visits, plan: Plan, taken: Taken, numbers: Mapping[str, Any], known: Known) -> Budget:
    """Return the error budget of a run.

    Parameters
    ----------
    taken
        The visits that the estimate rests on.
    numbers
        The estimate's own figures: kappa_se, kappa_counting_se, dof, estimator and what goes with them.
    """
    tables = tables_of(sums_of(visits, plan))
    lines = (
        _counting(numbers),
        _dark(tables, plan),
        _drift(numbers),
        _smooth_drift(visits, plan, taken),
        *_monitor(visits, taken, numbers),
        _dead_time(tables, plan, known),
        _slits(known),
        _places(visits, plan, taken, known),
    )
    seen = numbers.get("kappa_se")
    blind = [line.value for line in lines if line.kind == SYSTEMATIC and line.value is not None]
    total = None if seen is None else sqrt(seen**2 + sum(value**2 for value in blind))
    return Budget(lines=lines, total_se=total)


def _counting(numbers: Mapping[str, Any]) -> Line:
    return Line(
        name="counting",
        value=numbers.get("kappa_counting_se"),
        kind=RANDOM,
        source="the counts of this run, or the repeats of its power readings",
        halve="Four times the counts: four such nights, or a brighter source.",
    )


def _dark(tables: Tables, plan: Plan) -> Line:
    gradient = rate_gradient(tables.rates, tables.measured, plan)
    shut = int(np.flatnonzero(plan.openings == 0)[0])
    value = None
    if gradient is not None:
        value = float(np.sqrt(np.sum(gradient[:, shut] ** 2 * tables.variances[:, shut])))
    return Line(
        name="background",
        value=value,
        kind=PART,
        source="the counts with every slit shut, as part of counting",
        halve="Four times the dwell on `none`, or a quarter of the background.",
    )


def _drift(numbers: Mapping[str, Any]) -> Line:
    se, counting, dof = (numbers.get(key) for key in ("kappa_se", "kappa_counting_se", "dof"))
    value, value_se = None, None
    if se is not None and counting is not None and dof:
        beyond = se**2 - counting**2
        value = sqrt(max(beyond, 0.0))
        value_se = se**2 * sqrt(2 / dof) / (2 * value) if value > 0 else se * (2 / dof) ** 0.25
    return Line(
        name="source beyond counting",
        value=value,
        value_se=value_se,
        kind=RANDOM,
        source="the scatter of the pairs beyond counting (0 where there is none)",
        halve="A stand in a quarter of the time, a steadier source, or a monitor.",
    )


def _smooth_drift(visits: Visits, plan: Plan, taken: Taken) -> Line:
    """Return what a smooth source leaves of kappa through the visits really taken, missing ones missing."""
    return Line(
        name="smooth drift, missing visits",
        value=abs(smooth_drift(visits, plan, taken)),
        kind=SYSTEMATIC,
        source="a cubic through the levels of the stands, over the visits really taken",
        halve="Fewer stands left out, each pair of laps complete.",
    )


def smooth_drift(visits: Visits, plan: Plan, taken: Taken) -> float:
    """Return the error of the plain kappa that the smooth part of the source's drift makes."""
    level, variance = levels(visits, plan, taken)
    stand, time_s = plan.stand[taken.visit], visits.middle_s[taken.visit]
    many = added(stand, np.ones(len(stand)))
    known = np.flatnonzero((many > 0) & (np.nan_to_num(level) > 0) & (np.nan_to_num(variance) > 0))
    if len(known) <= DRIFT_DEGREE + 1:
        return 0.0
    middle, half = float(np.mean(time_s)), float(np.ptp(time_s)) / 2 or 1.0
    at = (added(stand, time_s)[known] / many[known] - middle) / half
    weight = level[known] / np.sqrt(variance[known])
    smooth = np.polynomial.Polynomial.fit(at, np.log(level[known]), DRIFT_DEGREE, w=weight)
    return float(taken.weight @ smooth((time_s - middle) / half))


def _monitor(visits: Visits, taken: Taken, numbers: Mapping[str, Any]) -> tuple[Line, ...]:
    if numbers.get("estimator") != "normalised to the monitor":
        return ()
    light = visits.monitor[taken.visit]
    cost = np.nansum(taken.weight**2 * visits.monitor_variance[taken.visit] / light**2)
    return (
        Line(
            name="monitor",
            value=float(np.sqrt(cost)),
            kind=PART,
            source="the monitor's own counting noise, as part of counting",
            halve="Four times the light on the monitor.",
        ),
    )


def _dead_time(tables: Tables, plan: Plan, known: Known) -> Line:
    """Return dkappa/dtau times the uncertainty of tau; the marginal weights make the slope nearly zero."""
    what, signs = plan_contrast(plan)
    weights = np.where(tables.measured, plan.weights, 0.0)
    _, delta = epsilon_and_delta(tables.rates, what, plan.normalisation, signs)
    template = -(tables.rates**2) @ what.residual
    under = float(weights @ delta)
    slope = float(weights @ template) / under if under > 0 else 0.0
    return Line(
        name="dead time",
        value=abs(slope) * known.dead_time_u_s,
        kind=SYSTEMATIC,
        source=f"dkappa/dtau {slope:.2g} per second times the uncertainty {known.dead_time_u_s:.2g} s",
        halve="The dead time measured twice as well, or half the rate.",
    )


def _slits(known: Known) -> Line:
    loads = known.slit_loads
    return Line(
        name="slit geometry",
        value=None if loads is None else sqrt(sum(load**2 for load in loads.values())),
        kind=SYSTEMATIC,
        source="the stated uncertainties of slits that were cut apart for their openings",
        halve="Slits measured twice as well, or one set of slits behind a moving shutter.",
    )


def _places(visits: Visits, plan: Plan, taken: Taken, known: Known) -> Line:
    """Return what the detector's scatter within stands does through the slope of each pattern."""
    return Line(
        name="detector position",
        value=_place_error(plan, taken, known),
        kind=SYSTEMATIC,
        source="the encoder's scatter within stands, through the slope of the expected patterns",
        halve="A stage that stands twice as still, or a settling time that is longer.",
    )


def _place_error(plan: Plan, taken: Taken, known: Known) -> float | None:
    if known.place_mm is None or known.slope_per_mm is None:
        return None
    stand, place = plan.stand[taken.visit], known.place_mm[taken.visit]
    if not np.isfinite(place).all():
        return None
    many = added(stand, np.ones(len(stand)))
    apart = place - (added(stand, place) / np.maximum(many, 1))[stand]
    freedom = len(stand) - int(np.count_nonzero(many))
    slope = known.slope_per_mm[plan.position[taken.visit], plan.opening[taken.visit]]
    pull = taken.weight * slope
    return float(np.sqrt(np.sum(apart**2) / max(freedom, 1) * np.sum(pull**2)))
