"""Arrays of the estimators: their types (dtype fixed, the shape stands beside each field), and adding up."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

FloatArray: TypeAlias = NDArray[np.float64]
IntArray: TypeAlias = NDArray[np.int64]
BoolArray: TypeAlias = NDArray[np.bool_]


def added(place: IntArray, numbers: FloatArray, size: int = 0) -> FloatArray:
    """Return numbers added up by place, 0 .. size - 1 (or the largest place)."""
    return np.asarray(np.bincount(place, numbers, size), np.float64)
