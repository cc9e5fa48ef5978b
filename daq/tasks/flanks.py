"""Flanks: what a window that stands aside loses, and how both its flanks tell how far it does."""

from __future__ import annotations

from math import erf, sqrt

import numpy as np


def clipped(offset_mm: float, width_mm: float, edge_mm: float, repeat_mm: float) -> float:
    """Return the share of the beam that a window loses, on average over where the stage comes to stand."""
    blur = sqrt(2 * (edge_mm**2 + repeat_mm**2))
    return sum(0.5 - erf((width_mm / 2 + side * offset_mm) / blur) / 2 for side in (-1, 1))


def balance_mm(left: float, right: float, ramp_mm: float) -> tuple[float, float]:
    """Return how far a window is off from the counts on its two half-height flanks, and the error [mm]."""
    total = left + right
    return ramp_mm / 2 * (right - left) / total, ramp_mm / (2 * sqrt(total))


def ramp_mm(edge_mm: float) -> float:
    """Return the width of the straight ramp whose slope at half height is that of a blurred edge."""
    return edge_mm * sqrt(2 * np.pi)
