"""Night plot: kappa by pair, the leftover and the patterns by position, and the night, readable in grey."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure, SubFigure

from daq import openings
from daq.report.facts import fact

INK, ACCENT, PALE = "#1b1b1b", "#b5490b", "#c9c9c9"
SMALL = 6


def draw_night(figure: Figure | SubFigure, facts: Mapping[str, Any]) -> None:
    """Draw the figures of a morning report into a figure; what the record lacks stays empty."""
    parts = figure.subfigures(3, 1, height_ratios=(1.5, 1.25, 1.0), squeeze=False)
    upper, plates, lower = parts[:, 0]
    kappa, leftover = upper.subplots(1, 2)
    _kappa(kappa, facts)
    _leftover(leftover, facts)
    _plates(plates, facts)
    _night(lower.subplots(1, 1), facts)
    upper.subplots_adjust(left=0.08, right=0.98, top=0.87, bottom=0.23, wspace=0.22)
    plates.subplots_adjust(left=0.08, right=0.98, top=0.85, bottom=0.33, wspace=0.08)
    lower.subplots_adjust(left=0.08, right=0.98, top=0.85, bottom=0.32)


def _numbers(facts: Mapping[str, Any], path: str) -> np.ndarray[Any, np.dtype[np.float64]]:
    found = fact(facts, path) or []
    return np.array([np.nan if one is None else one for one in found], float)


def _dress(axes: Axes, title: str, x: str, y: str) -> None:
    axes.set_title(title, fontsize=SMALL + 1)
    axes.set_xlabel(x, fontsize=SMALL)
    axes.set_ylabel(y, fontsize=SMALL)
    axes.tick_params(labelsize=SMALL)


def _kappa(axes: Axes, facts: Mapping[str, Any]) -> None:
    value, low, high = (
        1e4 * _numbers(facts, f"history.{name}") for name in ("kappa", "interval_low", "interval_high")
    )
    pairs = np.arange(1, len(value) + 1)
    hidden = bool(fact(facts, "hidden"))
    axes.axhline(0, color=PALE, linewidth=0 if hidden else 0.8)
    if len(value) and len(low) == len(value) == len(high):
        axes.fill_between(pairs, low, high, color=PALE, linewidth=0)
        shown = value[np.isfinite(low)]
        band = high[np.isfinite(high)]
        if len(shown) and len(band):
            middle, half = float(shown[-1]), 4 * max(float(band[-1]) - float(shown[-1]), 1e-9)
            axes.set_ylim(middle - half, middle + half)
    axes.plot(pairs, value, color=INK, marker="o", markersize=2, linewidth=0.8)
    _dress(axes, "kappa + offset, running" if hidden else "kappa, running, 95 % interval", "pairs", "[1e-4]")


def _leftover(axes: Axes, facts: Mapping[str, Any]) -> None:
    place = _numbers(facts, "positions_mm")
    value, bar = _numbers(facts, "epsilon_hz"), _numbers(facts, "epsilon_se_hz")
    axes.axhline(0, color=PALE, linewidth=0.8)
    if len(place) == len(value) == len(bar) and np.isfinite(value).any():
        axes.errorbar(place, value, bar, fmt="o", color=INK, markersize=2, elinewidth=0.6)
    else:
        axes.text(0.5, 0.5, "not shown", transform=axes.transAxes, ha="center", fontsize=SMALL)
    _dress(axes, "leftover by position, ± counting", "position [mm]", "[1/s]")


def _plates(figure: SubFigure, facts: Mapping[str, Any]) -> None:
    place, masks = _numbers(facts, "positions_mm"), fact(facts, "openings") or []
    rates = fact(facts, "rates_hz") or []
    table = np.array([[np.nan if one is None else one for one in row] for row in rates], float)
    most = max(len(masks), 1)
    for axes, mask, column in zip(
        figure.subplots(1, most, squeeze=False, sharey=True)[0], masks, range(most), strict=False
    ):
        if table.ndim == 2 and table.shape == (len(place), most):
            axes.plot(place, table[:, column] / 1e3, color=INK, linewidth=0.8)
        axes.set_title(openings.name(int(mask)), fontsize=SMALL)
        axes.tick_params(labelsize=SMALL - 1)
    figure.supylabel("[1000/s]", fontsize=SMALL, x=0.01)
    figure.supxlabel("position [mm]", fontsize=SMALL, y=0.04)


def _night(axes: Axes, facts: Mapping[str, Any]) -> None:
    hours = _numbers(facts, "rate.hours")
    mean, low, high = (_numbers(facts, f"rate.{name}") for name in ("mean", "low", "high"))
    if len(hours) == len(mean) == len(low) == len(high):
        axes.fill_between(hours, low, high, color=PALE, linewidth=0)
        axes.plot(hours, mean, color=INK, linewidth=0.8)
    for one in fact(facts, "marks") or []:
        axes.axvline(one, color=ACCENT, linewidth=0.8, linestyle=":")
    _dress(
        axes, "the night: mean rate of a stand; dotted: something was noticed", "hours of measuring", "[1/s]"
    )
