"""Windows: where light passes a mask, fitted to a scan by its blurred edges."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.optimize import brentq, least_squares
from scipy.special import ndtr

from daq.estimate.arrays import FloatArray
from daq.tasks.refusals import hopeless

NAME = "register"
ROUNDS = 4  # of fit and scatter in turn
SLOPE_MM, LEAST_HEIGHT = 1e-4, 5.0  # the height in its own errors: below it there is no window


@dataclass(frozen=True, slots=True)
class Edges:
    """A window as it was fitted: counts b + h (Phi((x - left)/s) - Phi((x - right)/s)), and its errors."""

    values: FloatArray
    covariance: FloatArray
    pull: FloatArray  # how far counts lie from the fit, in roots of the fit
    reach: FloatArray  # by how many of those a place that is off by 1 mm moves them
    dof: int

    @property
    def centre_mm(self) -> float:
        """The middle between both edges."""
        return float(self.values[2] + self.values[3]) / 2

    @property
    def width_mm(self) -> float:
        """The way from edge to edge."""
        return float(self.values[3] - self.values[2])

    @property
    def edge_mm(self) -> float:
        """The blur of the edges."""
        return float(abs(self.values[4]))

    @property
    def chi2(self) -> float:
        """How well the window fits, by counting alone."""
        return float(self.pull @ self.pull)

    @property
    def centre_se_mm(self) -> float:
        """The standard error of the middle."""
        half = np.array([0, 0, 0.5, 0.5, 0])
        return float(np.sqrt(half @ self.covariance @ half))


def window(place_mm: FloatArray, values: FloatArray) -> FloatArray:
    """Return the counts of a window with blurred edges."""
    background, height, left, right, edge = values
    rising, falling = (ndtr((place_mm - at) / edge) for at in (left, right))
    return np.asarray(background + height * (rising - falling))


def fitted(place_mm: FloatArray, counts: FloatArray, start: FloatArray, scatter_mm: float = 0.0) -> Edges:
    """Return the window that fits counts best, by Poisson deviance; errors from the Fisher matrix there.

    Parameters
    ----------
    scatter_mm
        How far the mask stands off its places at random: counts on the edges tell less then.

    Raises
    ------
    DaqError
        When the fit does not converge, or ends at no window.
    """
    wider = np.sqrt(1 + (_reach(place_mm, start) * scatter_mm) ** 2)
    scale = np.array([max(start[0], 1.0), max(start[1], 1.0), 1e-2, 1e-2, 1e-2])

    def misfit(at: FloatArray) -> FloatArray:
        expected = np.maximum(window(place_mm, at * scale), 1e-9)
        ratio = np.where(counts > 0, counts / expected, 1.0)
        deviance = 2 * (counts * np.log(ratio) - (counts - expected))
        return np.asarray(np.sign(counts - expected) * np.sqrt(np.maximum(deviance, 0.0)))

    found = least_squares(lambda at: misfit(at) / wider, start / scale, method="lm", max_nfev=400)
    values = found.x * scale
    values[4] = abs(values[4])
    inside = place_mm.min() < values[2] < values[3] < place_mm.max()
    covariance = _covariance(place_mm, values, wider) if found.success and inside else None
    if covariance is None or not values[1] > LEAST_HEIGHT * np.sqrt(covariance[1, 1]):
        raise hopeless(
            NAME,
            f"the edges near {start[2]:.2f} and {start[3]:.2f} mm cannot be fitted: it does not converge",
            "Look at the picture of the scan, and at the chip for dust; nothing was moved further",
        )
    return Edges(values, covariance, misfit(found.x), _reach(place_mm, values), len(counts) - 5)


def together(
    scans: Mapping[str, tuple[FloatArray, FloatArray]], starts: Mapping[str, FloatArray]
) -> tuple[dict[str, Edges], float]:
    """Return the windows of several scans, and how far the stage stands off its places at random [mm]."""
    scatter_mm, at = 0.0, dict(starts)
    for _ in range(ROUNDS):
        found = {name: fitted(*scan, at[name], scatter_mm) for name, scan in scans.items()}
        scatter_mm = repeat_mm(list(found.values()))
        at = {name: one.values for name, one in found.items()}
    return found, scatter_mm


def repeat_mm(edges: Sequence[Edges]) -> float:
    """Return how far the stage comes to stand off its place at random: what counting leaves to explain [mm].

    Notes
    -----
    The s that makes sum pull^2 / (1 + reach^2 s^2) the degrees of freedom; 0 where counting explains all.
    """
    pull, reach = (np.concatenate([getattr(one, name) for one in edges]) for name in ("pull", "reach"))
    dof = sum(one.dof for one in edges)

    def beyond(size_mm: float) -> float:
        return float(np.sum(pull**2 / (1 + (reach * size_mm) ** 2))) - dof

    if beyond(0.0) <= 0:
        return 0.0
    most = 1.0  # no stage stands farther off than a millimetre and is a stage
    return most if beyond(most) > 0 else float(brentq(beyond, 0.0, most))


def _reach(place_mm: FloatArray, values: FloatArray) -> FloatArray:
    """Return by how many roots of the counts a place that is off by 1 mm moves them."""
    slope = (window(place_mm + SLOPE_MM, values) - window(place_mm - SLOPE_MM, values)) / (2 * SLOPE_MM)
    return np.asarray(slope / np.sqrt(np.maximum(window(place_mm, values), 1e-9)))


def _slopes(place_mm: FloatArray, values: FloatArray) -> FloatArray:
    """Return what each value does to the counts, by central differences (N, 5)."""
    steps = np.maximum(np.abs(values), 1e-3) * 1e-5
    return np.stack(
        [
            (window(place_mm, values + step) - window(place_mm, values - step)) / (2 * step.sum())
            for step in np.diag(steps)
        ],
        axis=1,
    )


def _covariance(place_mm: FloatArray, values: FloatArray, wider: FloatArray) -> FloatArray | None:
    """Return the inverse of the Fisher matrix of errors so much wider, None where it has none."""
    slopes = _slopes(place_mm, values)
    fisher = slopes.T @ (slopes / (wider**2 * np.maximum(window(place_mm, values), 1e-9))[:, None])
    try:
        found = np.asarray(np.linalg.inv(fisher))
    except np.linalg.LinAlgError:
        return None
    return found if np.all(np.diag(found) > 0) else None


def plain(edges: Mapping[str, Edges]) -> dict[str, dict[str, Any]]:
    """Return what was fitted, window by window, for a record."""
    return {
        name: {"centre_mm": one.centre_mm, "width_mm": one.width_mm, "edge_mm": one.edge_mm}
        | {"height": float(one.values[1]), "background": float(one.values[0])}
        | {"covariance": one.covariance.tolist(), "chi2": one.chi2, "dof": one.dof}
        for name, one in edges.items()
    }
