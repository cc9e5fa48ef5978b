"""Drawing: which of the drawn windows a scan has seen, and whether the chip is in as drawn."""

from __future__ import annotations

from collections.abc import Mapping
from math import sqrt

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.tasks.refusals import hopeless
from daq.tasks.windows import NAME

OFF_ERRORS = 5.0  # a spacing that is farther off than so many of its errors is another one


def seen_windows(place_mm: FloatArray, rate_hz: FloatArray, least_hz: float) -> list[tuple[float, float]]:
    """Return both ends of every stretch of a coarse scan that is brighter than a rate, half a step more."""
    step = float(np.median(np.diff(place_mm))) / 2
    bright = np.concatenate([[False], rate_hz > least_hz, [False]])
    starts = np.flatnonzero(bright[1:] & ~bright[:-1])
    stops = np.flatnonzero(bright[:-1] & ~bright[1:]) - 1
    return [
        (float(place_mm[a]) - step, float(place_mm[b]) + step) for a, b in zip(starts, stops, strict=True)
    ]


def named(centres_mm: FloatArray, drawn_mm: Mapping[str, float], error_mm: float) -> dict[str, float]:
    """Return name -> centre of the windows that were seen, when they are those of the drawing.

    Raises
    ------
    DaqError
        When none was seen, one is missing or too many, or the spacings fit only turned round, or both ways.
    """
    names = sorted(drawn_mm, key=lambda name: drawn_mm[name])
    drawn = np.array([drawn_mm[name] for name in names])
    if not len(centres_mm):
        raise hopeless(
            NAME, "no window was seen on the whole travel", "Look for the beam, shutter and detector"
        )
    if len(centres_mm) != len(drawn):
        raise hopeless(
            NAME, _wrong_number(centres_mm, drawn, names), "See that the chip is the one described"
        )
    _refuse_spacings(centres_mm, drawn, OFF_ERRORS * error_mm * sqrt(2))
    return dict(zip(names, centres_mm.tolist(), strict=True))


def _refuse_spacings(centres_mm: FloatArray, drawn_mm: FloatArray, limit_mm: float) -> None:
    """Refuse windows whose spacings fit the drawing not as it is, or turned round as well."""
    forward, turned = (_spacing_error(centres_mm, side) for side in (drawn_mm, -drawn_mm[::-1]))
    if forward > limit_mm and turned <= limit_mm:
        raise hopeless(
            NAME,
            "the spacings of the windows fit the drawing only turned round: the chip is in the wrong way",
            "Take it out and put it in as drawn",
        )
    if forward > limit_mm:
        raise hopeless(
            NAME,
            f"the spacings of the windows are off the drawing by {forward:.3f} mm (rms), "
            f"{limit_mm:.3f} allowed",
            "See that the chip is the one described",
        )
    if turned <= limit_mm:
        raise hopeless(
            NAME,
            "the spacings fit the drawing both ways round, so nobody can say which way the chip is in",
            "Use a chip with unequal spacings or a key window (`mask.key_mm`)",
        )


def _spacing_error(seen_mm: FloatArray, drawn_mm: FloatArray) -> float:
    return float(np.sqrt(np.mean((np.diff(seen_mm) - np.diff(drawn_mm)) ** 2)))


def _wrong_number(seen_mm: FloatArray, drawn_mm: FloatArray, names: list[str]) -> str:
    half = float(np.diff(drawn_mm).min()) / 2
    dark = [name for name, at in zip(names, drawn_mm, strict=True) if np.abs(seen_mm - at).min() > half]
    near = f" Nothing near {', '.join(dark)}." if dark else ""
    return f"{len(seen_mm)} windows were seen where the drawing has {len(drawn_mm)}.{near}".rstrip(".")
