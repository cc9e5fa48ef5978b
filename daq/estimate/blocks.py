"""Blocks: the standard error that a run takes from the scatter of its own pairs."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike


def jackknife(leave_one_out: ArrayLike) -> tuple[float, int]:
    """Return the delete-one standard error and its degrees of freedom.

    Parameters
    ----------
    leave_one_out
        The estimate with one block left out, for each of two or more blocks.

    Notes
    -----
    Assumes independent blocks: consecutive pairs of mirrored laps, never one direction alone. Use with
    Student's t of the degrees of freedom given.

    References
    ----------
    .. [1] "Bias and confidence in not quite large samples", Ann. Math. Stat. 29, 614 (1958), from memory.
    """
    values = np.asarray(leave_one_out, float)
    if values.ndim != 1 or len(values) < 2:
        raise ValueError("a jackknife needs the estimate with one block left out for two or more blocks")
    blocks = len(values)
    squares = np.sum((values - values.mean()) ** 2)
    return float(np.sqrt((blocks - 1) / blocks * squares)), blocks - 1
