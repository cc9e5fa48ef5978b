"""A plan as a picture: visits against time, the error bar to come, and the orders compared on this rig."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from daq import openings
from daq.errors import DescriptionError
from daq.itinerary import Forecast, Itinerary

STANDS_SHOWN = 4
INK, LIGHT, ACCENT = "#1b1b1b", "#c9d6e8", "#b5490b"
FORMATS = (".svg", ".png", ".pdf")


def draw_plan(
    path: Path, title: str, itinerary: Itinerary, expected: Forecast, compared: Mapping[str, Forecast]
) -> None:
    """Write the picture of a plan; the ending of the path says in which format.

    Raises
    ------
    DescriptionError
        For another ending, or a place that cannot be written to.
    """
    if path.suffix not in FORMATS:
        raise DescriptionError((f"{path}: a picture ends in {', '.join(FORMATS)}. Give it such a name.",))
    figure = Figure(figsize=(11.0, 7.5), layout="constrained")
    (visits, stands), (funnel, orders) = figure.subplots(2, 2)
    figure.suptitle(title)
    _laps(visits, itinerary)
    _stands(stands, itinerary)
    _funnel(funnel, expected)
    _orders(orders, compared, itinerary.order)
    try:
        figure.savefig(path, metadata={"Date": None} if path.suffix == ".svg" else None)
    except OSError as error:
        raise DescriptionError((f"{path}: {(error.strerror or 'cannot be written').lower()}.",)) from error


def _laps(axes: Axes, itinerary: Itinerary) -> None:
    """Draw the detector position of the whole run, the pairs shaded in turn."""
    hours = itinerary.start_s / 3600
    shown = np.flatnonzero(np.diff(itinerary.position_mm, prepend=np.inf))
    axes.plot(hours[shown], itinerary.position_mm[shown], color=INK, linewidth=0.6)
    if np.all(np.diff(itinerary.pair) >= 0):  # in blocked order pairs lie within one another
        begins = hours[np.searchsorted(itinerary.pair, np.arange(itinerary.planned_pairs))]
        for first, last in zip(begins[::2], np.append(begins[1:], hours[-1])[::2], strict=True):
            axes.axvspan(first, last, color=LIGHT, linewidth=0)
    axes.set(title="visits: where the detector stands", xlabel="hours", ylabel="position [mm]")


def _stands(axes: Axes, itinerary: Itinerary) -> None:
    """Draw the gates of the first stands, opening by opening."""
    shown = np.flatnonzero(itinerary.stand < STANDS_SHOWN)
    shown = shown[shown < STANDS_SHOWN * itinerary.visits_per_stand]
    row = itinerary.opening_index[shown]
    axes.barh(row, itinerary.dwell_s[shown], left=itinerary.start_s[shown], color=INK, height=0.7)
    names = [openings.name(int(mask)) for mask in itinerary.openings]
    axes.set_yticks(range(len(names)), names)
    axes.set(title="visits: the first stands, gates open", xlabel="seconds", ylabel="opening")


def _funnel(axes: Axes, expected: Forecast) -> None:
    """Draw the error bar against time, with the goal."""
    hours, se = np.array(expected.hours), np.array(expected.se)
    axes.fill_between(hours, -se, se, color=LIGHT, step=None)
    axes.plot(hours, se, color=INK, linewidth=1.0)
    axes.plot(hours, -se, color=INK, linewidth=1.0)
    if expected.goal_se is not None:
        for side in (-1, 1):
            axes.axhline(side * expected.goal_se, color=ACCENT, linestyle="--", linewidth=1.0)
    if expected.goal_s is not None and expected.goal_s <= expected.total_s * (1 + 1e-9):
        axes.axvline(expected.goal_s / 3600, color=ACCENT, linewidth=1.0)
        axes.annotate("goal", (expected.goal_s / 3600, 0), color=ACCENT, ha="right", rotation=90)
    axes.set(title="forecast: one standard error of kappa", xlabel="hours", ylabel="± kappa_se")
    axes.ticklabel_format(axis="y", style="sci", scilimits=(0, 0))


def _orders(axes: Axes, compared: Mapping[str, Forecast], own: str) -> None:
    """Draw Q of every order on this rig, on a logarithmic scale."""
    names = list(compared)
    q = [compared[name].q for name in names]
    bars = axes.barh(names, q, color=[ACCENT if name == own else LIGHT for name in names], edgecolor=INK)
    axes.bar_label(bars, [f" {value:.3g}" for value in q])
    axes.set_xscale("log")
    axes.set_xlim(min(1.0, *q) / 1.2, max(q) * 10)
    axes.invert_yaxis()
    axes.set(title="orders on this rig: Q (time over the ideal time)", xlabel="Q")
