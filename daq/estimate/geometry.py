"""Geometry: what the cuts of a run's slits did to its residual, and the residual without it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np
from scipy.special import stdtrit

from daq.estimate.arrays import FloatArray
from daq.estimate.blocks import jackknife
from daq.estimate.contrast import epsilon_and_delta
from daq.estimate.cuts import Light, Mask, mask_of
from daq.estimate.dataset import plan_of_dataset, rows_of_dataset
from daq.estimate.fitted import Fitted, fitted
from daq.estimate.limits import null_limit
from daq.estimate.lit import light_of
from daq.estimate.loads import Instance
from daq.estimate.marginal import Marginal, marginal
from daq.estimate.plan import Plan
from daq.estimate.sensitivity import by_cell
from daq.estimate.settle import SECONDS_PER_HOUR, Settled, settle, taking
from daq.estimate.spectrum import frequencies, lines, spectrum
from daq.estimate.sums import sums_of
from daq.estimate.tables import Tables, kappa_of, over, plan_contrast, tables_of
from daq.estimate.visits import Visits, visits_of

LEVEL_SD = 0.1  # how far a source may drift from position to position, for all openings alike
APART = 3.0  # standard errors between the two estimates from which they are said to differ


@dataclass(frozen=True, slots=True, kw_only=True)
class Geometry:
    """The residual with the cuts accounted for (headline), and beside it from all patterns together.

    `kappa_before` nothing accounted for; `kappa_se` holds the jackknife and `geometry_se`, `interval_95` and
    `limit_95` ("|kappa| < X") both. `joint_kappa` is None where the model does not fit (`joint_fits`);
    `joint_ratio` is chi-squared over freedom. `differ`: the two are too far apart, or the model does not fit.
    `spectrum`: power of epsilon by frequency before and after, and at the lines that imperfect cuts predict.
    """

    kappa_before: float
    kappa: float
    kappa_se: float
    counting_se: float
    geometry_se: float
    interval_95: tuple[float, float] | None
    limit_95: float | None
    joint_kappa: float | None
    joint_se: float | None
    joint_ratio: float | None
    joint_fits: bool
    differ: bool
    visibility: Mapping[str, float]
    spectrum: Mapping[str, Any]


def geometry_of(dataset: Any) -> Geometry | None:
    """Return what the cuts did to a run; None where all openings share their slits, or nothing can be told.

    Two slits have no residual that should vanish.

    While a run is blinded nothing is told: what is left of the third order would give its rates away.
    """
    record: Mapping[str, Any] | None = dataset.attrs.get("cuts")
    plan = plan_of_dataset(dataset)
    if record is None or plan.blinding.hides:
        return None
    visits = visits_of(rows_of_dataset(dataset), plan)
    return geometry_after(visits, plan, settle(visits, plan), record)


def geometry_after(
    visits: Visits, plan: Plan, settled: Settled, record: Mapping[str, Any] | None
) -> Geometry | None:
    """Return what the cuts did to the complete pairs; see `geometry_of`.

    Parameters
    ----------
    settled
        What `settle` gave for the same visits.
    record
        The cuts as the run's record holds them.
    """
    if record is None or plan.blinding.hides or plan.slits < 3:
        return None
    tables = tables_of(sums_of(visits, plan, taking(settled, visits, plan)))
    if not (tables.blocks and tables.measured.all() and (tables.variances > 0).all()):
        return None
    per_s = (settled.numbers.get("drift_per_sqrt_hour") or 0.0) ** 2 / SECONDS_PER_HOUR
    return accounted(tables, plan, _mask(record, plan), per_s * wander_s(visits, plan))


def wander_s(visits: Visits, plan: Plan) -> FloatArray:
    """Return the mean square by which a walk of unit variance a second moves a cell from its stands (J, K).

    The mean square of a visit's level less its stand's, over the number of stands.
    """
    number = np.flatnonzero((plan.stand >= 0) & np.append(visits.used, False)[plan.stand])
    apart = visits.middle_s[number].reshape(-1, plan.whole_stand)
    between = np.abs(apart[:, :, None] - apart[:, None, :])
    square = between.mean(axis=2) - between.mean(axis=(1, 2))[:, None] / 2
    many = by_cell(plan, number, np.ones(len(number)))
    return np.asarray(over(by_cell(plan, number, square.ravel()), many**2))


def accounted(tables: Tables, plan: Plan, mask: Mask, wander: FloatArray) -> Geometry | None:
    """Return the residual of tables with the cuts of a mask accounted for; None where it has no divisor.

    Parameters
    ----------
    wander
        Relative variance that the source adds to each cell within its stands (J, K), beside counting.
    """
    what, signs = plan_contrast(plan)
    epsilon, delta = epsilon_and_delta(tables.rates, what, plan.normalisation, signs)
    variance = tables.variances @ what.residual**2
    if not float(delta @ plan.weights) > 0:
        return None
    try:
        light = light_of(mask, tables.rates, tables.variances)
        found = marginal(mask, light, what.residual, epsilon, delta, variance)
    except np.linalg.LinAlgError:
        return None
    jackknife_se = _jackknife_se(tables, plan, found.weights)
    interval_95, limit_95 = _bands(found, jackknife_se, tables.blocks)
    joint = _joint(mask, light, tables, tables.variances + wander * tables.rates**2, delta)
    shown = joint is not None and joint.fits
    apart = joint is not None and abs(joint.kappa - found.kappa) > APART * found.se
    return Geometry(
        kappa_before=float(kappa_of(tables.rates, tables.measured, plan)),
        kappa=found.kappa,
        kappa_se=sqrt(jackknife_se**2 + found.geometry_se**2),
        counting_se=found.counting_se,
        geometry_se=found.geometry_se,
        interval_95=interval_95,
        limit_95=limit_95,
        joint_kappa=joint.kappa if joint and shown else None,
        joint_se=joint.se if joint and shown else None,
        joint_ratio=joint.chi2 / joint.dof if joint else None,
        joint_fits=shown,
        differ=apart or not shown,
        visibility=_visibility(mask, joint.light if joint else light),
        spectrum=_spectrum(mask, epsilon, found, delta, variance),
    )


def _mask(record: Mapping[str, Any], plan: Plan) -> Mask:
    cuts = tuple(Instance(**{**one, "openings": tuple(one["openings"])}) for one in record["slits"])
    angle_rad = np.arctan(plan.positions_mm * 1e-3 / record["distance_m"])
    return mask_of(plan.openings, plan.slits, cuts, angle_rad, record["wavelength_m"], record["distance_m"])


def _jackknife_se(tables: Tables, plan: Plan, weights: FloatArray) -> float:
    """Return the standard error that the scatter of the pairs gives, weights and cuts as they are."""
    if tables.blocks < 2:
        return 0.0
    what, signs = plan_contrast(plan)
    epsilon, delta = epsilon_and_delta(tables.without, what, plan.normalisation, signs)
    return jackknife((epsilon @ weights) / (delta @ weights))[0]


def _bands(
    found: Marginal, jackknife_se: float, blocks: int
) -> tuple[tuple[float, float] | None, float | None]:
    """Return the 95 % interval of kappa, and the limit of its size; None below two blocks."""
    if blocks < 2:
        return None, None
    limit, total, dof = null_limit(found.kappa, jackknife_se, blocks - 1, [(found.geometry_se, None)])
    half = float(stdtrit(dof, 0.975)) * total
    return (found.kappa - half, found.kappa + half), limit


def _joint(
    mask: Mask, light: Light, tables: Tables, variances: FloatArray, delta: FloatArray
) -> Fitted | None:
    try:
        return fitted(mask, light, tables.rates, variances, delta, LEVEL_SD)
    except (ValueError, np.linalg.LinAlgError):
        return None


def _visibility(mask: Mask, light: Light) -> dict[str, float]:
    names = [mask.letters[one] + mask.letters[other] for one, other in mask.pairs]
    return dict(zip(names, light.visibility.tolist(), strict=True))


def _spectrum(
    mask: Mask, epsilon: FloatArray, found: Marginal, delta: FloatArray, variance: FloatArray
) -> dict[str, Any]:
    after = found.left + found.kappa * delta
    at_m = frequencies(mask.sine)
    by_line = lines(mask)
    there = np.array(list(by_line.values()))
    before_at, after_at = (spectrum(part, variance, mask.sine, there) for part in (epsilon, after))
    return {
        "distance_m": at_m.tolist(),
        "before": spectrum(epsilon, variance, mask.sine, at_m).tolist(),
        "after": spectrum(after, variance, mask.sine, at_m).tolist(),
        "lines": [
            {"name": name, "distance_m": float(place), "before": float(old), "after": float(new)}
            for name, place, old, new in zip(by_line, there, before_at, after_at, strict=True)
        ],
    }
