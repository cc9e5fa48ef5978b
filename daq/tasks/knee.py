"""Knee: a line over the middle of a plateau, and where the plateau begins."""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import sqrt

import numpy as np

from daq.estimate.arrays import BoolArray, FloatArray

KNEE = 0.01  # of the rate: where the plateau begins, so far below its line
TURNS = 4  # rounds of line and knee


@dataclass(frozen=True, slots=True)
class Plateau:
    """A line through the log rate over the plateau: slope for one unit and its error, where it begins."""

    slope: float
    se: float
    level: float
    middle: float
    begins: float | None
    chi2: float
    dof: int

    def line(self, at: FloatArray) -> FloatArray:
        """Return the log rate of the line at settings."""
        return np.asarray(self.level + self.slope * (at - self.middle))


def plateau(at: FloatArray, log_rate: FloatArray, se: FloatArray, number: FloatArray) -> Plateau:
    """Return the plateau in log rates at settings, taken one after another (`number`, for a steady drift).

    Notes
    -----
    Weighted least squares over the middle third between knee and upper end, the knee where the log rate has
    fallen by `KNEE` below the line, in turn; errors grow with the root of chi2 over freedom above one.
    """
    begins, low, high = None, float(at.min()), float(at.max())
    for _ in range(TURNS):
        start = low if begins is None else begins
        third = (high - start) / 3
        inside = (at >= start + third - 1e-9) & (at <= high - third + 1e-9)
        inside = inside if len(np.unique(at[inside])) >= 2 else at >= start + third / 2
        found = _line(at, log_rate, se, number, inside)
        begins = _knee(at, log_rate, found)
    return replace(found, begins=begins)


def _line(
    at: FloatArray, log_rate: FloatArray, se: FloatArray, number: FloatArray, inside: BoolArray
) -> Plateau:
    middle = float(at[inside].mean())
    steps = number[inside] - number[inside].mean()
    design = np.stack([np.ones(len(steps)), at[inside] - middle, steps], axis=1) / se[inside][:, None]
    inverse = np.linalg.pinv(design.T @ design)
    solved = inverse @ design.T @ (log_rate[inside] / se[inside])
    chi2 = float(np.sum((log_rate[inside] / se[inside] - design @ solved) ** 2))
    dof = max(len(steps) - 3, 1)
    error = sqrt(float(inverse[1, 1]) * max(chi2 / dof, 1.0))
    return Plateau(float(solved[1]), error, float(solved[0]), middle, None, chi2, dof)


def _knee(at: FloatArray, log_rate: FloatArray, found: Plateau) -> float | None:
    """Return the setting at which the log rate has fallen by `KNEE` below the line, None where it has not."""
    places = np.unique(at)
    short = found.line(places) - np.array([float(log_rate[at == place].mean()) for place in places])
    below = np.flatnonzero((short > KNEE) & (places < found.middle))
    if not len(below):
        return None
    last = int(below[-1])
    share = (short[last] - KNEE) / max(short[last] - short[last + 1], 1e-12)
    return float(places[last] + min(share, 1.0) * (places[last + 1] - places[last]))
