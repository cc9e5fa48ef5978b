"""The geometry as text: the residual with the cuts of its slits accounted for, and whether to trust it."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from daq.report.numbers import signed, upwards, with_error

NOISE = 7.0  # power above which a line is pointed at: chance alone is there once in a thousand


def geometry_lines(figures: Mapping[str, Any]) -> list[str]:
    """Return what the cuts did to the residual; nothing where all openings share their slits.

    Parameters
    ----------
    figures
        What `summary` gave.
    """
    found = figures.get("geometry")
    if not found:
        return []
    return [*_residuals(found), *_flag(found), *_spectrum(found["spectrum"])]


def _residuals(found: Mapping[str, Any]) -> Iterator[str]:
    yield "The slits were cut apart for their openings; with their measured places and widths accounted for:"
    bars = f"of it ± {found['geometry_se']:.2e} what the measurement of the slits leaves open"
    yield f"kappa = {with_error(found['kappa'], found['kappa_se'])} ({bars})"
    if found["interval_95"]:
        low, high = found["interval_95"]
        yield f"95 % interval: {signed(low)} to {signed(high)}"
        yield f"|kappa| < {upwards(found['limit_95'])} at 95 % confidence"
    yield f"before that it is {with_error(found['kappa_before'], found['counting_se'])} (counting alone)"
    if found["joint_kappa"] is not None:
        ratio = f"chi-squared over freedom {found['joint_ratio']:.2f}"
        yield f"all patterns together: {with_error(found['joint_kappa'], found['joint_se'])} ({ratio})"


def _flag(found: Mapping[str, Any]) -> Iterator[str]:
    if not found["joint_fits"]:
        ratio = found["joint_ratio"]
        size = "it does not settle" if ratio is None else f"chi-squared over freedom is {ratio:.3g}"
        yield (
            f"LOOK AT THIS: the model of slits and light does not fit the patterns ({size}). Something acts "
            "that is not cuts, light or visibility: the figure above may be as wrong as that of all "
            "patterns, which is not shown."
        )
    elif found["differ"]:
        yield (
            "LOOK AT THIS: both figures differ by more than three standard errors. Look at the measured "
            "slits and at what the model leaves out before either is used."
        )


def _spectrum(spectrum: Mapping[str, Any]) -> Iterator[str]:
    yield "Epsilon by its frequency over position (power; 1 is counting noise), where imperfect slits show:"
    for line in spectrum["lines"]:
        mark = "  <-- look at this" if line["after"] > NOISE else ""
        yield (
            f"{1e9 * line['distance_m']:>12.5g} nm  {line['name']}: {line['before']:.3g} before, "
            f"{line['after']:.3g} after{mark}"
        )
    other = max(spectrum["after"])
    at = spectrum["distance_m"][spectrum["after"].index(other)]
    many = len(spectrum["after"])
    yield f"the most at any of {many} frequencies, after: {other:.3g}, at {1e9 * at:.5g} nm"
