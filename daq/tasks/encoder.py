"""Encoder: whether it stands where the counts say, or sits on the motor and sees neither play nor chance."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np

from daq.estimate.arrays import FloatArray

BLIND = 1.5  # times what counting explains: what is left beyond it, the encoder has not seen
SLOPE_ERRORS = 3.0


@dataclass(frozen=True, slots=True)
class Seen:
    """The slope of places by counts over places by encoder, and what is left between both [mm]."""

    slope: float
    se: float
    left_mm: float
    counting_mm: float

    @property
    def scaled(self) -> bool:
        """Whether a millimetre of the encoder is one of the counts, within its errors."""
        return abs(self.slope - 1.0) <= SLOPE_ERRORS * self.se

    @property
    def blind(self) -> bool:
        """Whether the counts move by what the encoder does not see."""
        return self.left_mm > BLIND * self.counting_mm

    @property
    def said(self) -> str:
        """What that means, in words."""
        if not self.scaled:
            return f"a step of the encoder is {self.slope:.3f} +- {self.se:.3f} of its size by the counts"
        if self.blind:
            return f"the encoder does not see {1e3 * self.left_mm:.1f} um of it: it sits on the motor"
        return "the encoder sees as much"


def seen_by(encoder_mm: Sequence[FloatArray], place_mm: Sequence[FloatArray], counting_mm: float) -> Seen:
    """Return what encoders see of places, window by window (each with a middle of its own).

    Parameters
    ----------
    encoder_mm, place_mm
        Of the visits at each window; what counting leaves of a place is `counting_mm`.
    """
    x = np.concatenate([one - one.mean() for one in encoder_mm])
    y = np.concatenate([one - one.mean() for one in place_mm])
    slope = float(x @ y / (x @ x))
    left = sqrt(float(np.sum((y - slope * x) ** 2)) / (len(x) - len(encoder_mm) - 1))
    return Seen(slope, left / sqrt(float(x @ x)), left, counting_mm)
