"""The forest of a pool: every night with its bar, and below them all nights together."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import floor, log10
from pathlib import Path
from typing import Any

from matplotlib.figure import Figure
from scipy.special import stdtrit

from daq.errors import DescriptionError
from daq.report.planned import ACCENT, FORMATS, INK, LIGHT

ODD = 0.05
LABELLED = 60  # nights that still have room for their names; of more, the odd ones are named
ROW_IN, THIN_ROW_IN, HIGHEST_IN = 0.25, 0.06, 40.0
Interval = tuple[float, float]
Way = tuple[str, float, Interval]


@dataclass(frozen=True, slots=True)
class Line:
    """A night: kappa, standard error, degrees of freedom, weight, and the p of lying so far from others."""

    name: str
    kappa: float
    se: float
    dof: float
    weight: float
    p: float

    @property
    def ends(self) -> Interval:
        """The 95 % interval."""
        half = float(stdtrit(self.dof, 0.975)) * self.se
        return self.kappa - half, self.kappa + half


def draw_forest(
    path: Path,
    nights: Sequence[Line],
    together: Sequence[Way],
    title: str,
    zero: bool = True,
) -> None:
    """Write the picture; the ending of the path says in which format.

    Parameters
    ----------
    together
        Name, value and 95 % interval of every way to take the nights together; the first is the headline.
    zero
        Whether zero is drawn: not while kappa is hidden.

    Raises
    ------
    DescriptionError
        For another ending, or a place that cannot be written to.
    """
    check_ending(path)
    labelled = len(nights) <= LABELLED
    step = 1 if labelled else round(ROW_IN / THIN_ROW_IN)  # rows that a diamond takes
    first = len(nights) + step
    rows = first + step * len(together)
    height_in = 1.6 + (ROW_IN if labelled else THIN_ROW_IN) * len(nights) + ROW_IN * len(together)
    figure = Figure(figsize=(9.0, min(height_in, HIGHEST_IN)), layout="constrained")
    axes = figure.subplots()
    axes.set_ylim(rows - 0.4, -0.6)
    power = _power([end for line in nights for end in line.ends])
    axes.axvspan(*(end / 10.0**power for end in together[0][2]), color=LIGHT, alpha=0.35, linewidth=0)
    if zero:
        axes.axvline(0.0, color=INK, linewidth=0.8, linestyle=(0, (4, 3)))
    _nights(axes, nights, power, labelled)
    told = [(at, line) for at, line in enumerate(nights) if labelled or line.p < ODD]
    below = [(first + step * at, one) for at, one in enumerate(together)]
    _together(axes, below, power, 0.35 * step)
    _label(axes, told, below, power)
    what = "kappa" if zero else "kappa + hidden offset"
    axes.set_xlabel(f"{what} [1e{power:+03d}], 95 % intervals" if power else f"{what}, 95 % intervals")
    axes.set_title(title, fontsize=9, loc="left")
    try:
        figure.savefig(path, dpi=150, metadata={"Date": None} if path.suffix == ".svg" else None)
    except OSError as error:
        raise DescriptionError((f"{path}: {(error.strerror or 'cannot be written').lower()}.",)) from error


def check_ending(path: Path) -> None:
    """Raise DescriptionError where a path names no kind of picture."""
    if path.suffix not in FORMATS:
        raise DescriptionError((f"{path}: a picture ends in {', '.join(FORMATS)}. Give it such a name.",))


def _nights(axes: Any, nights: Sequence[Line], power: int, labelled: bool) -> None:
    """Draw bars, and squares whose area is the weight."""
    heaviest = max(line.weight for line in nights)
    for at, line in enumerate(nights):
        colour = ACCENT if line.p < ODD else INK
        axes.plot([end / 10.0**power for end in line.ends], [at, at], color=colour, linewidth=1.0)
        size = (7.0 if labelled else 3.0) * (line.weight / heaviest) ** 0.5
        axes.plot([line.kappa / 10.0**power], [at], "s", color=colour, markersize=max(size, 1.0))


def _together(axes: Any, together: Sequence[tuple[int, Way]], power: int, half: float) -> None:
    """Draw diamonds, the headline filled."""
    for at, (_, value, ends) in together:
        x = [one / 10.0**power for one in (ends[0], value, ends[1], value)]
        face = INK if at == together[0][0] else "white"
        axes.fill(x, [at, at - half, at, at + half], facecolor=face, edgecolor=INK, linewidth=1.0, zorder=3)


def _label(
    axes: Any, nights: Sequence[tuple[int, Line]], together: Sequence[tuple[int, Way]], power: int
) -> None:
    """Name rows at the left, and tell their numbers at the right."""
    unit = 10.0**power
    left = [*(line.name for _, line in nights), *(name for _, (name, _, _) in together)]
    right = [
        *(
            f"{line.kappa / unit:+.2f} ± {line.se / unit:.2f}   {100 * line.weight:.2g} %"
            for _, line in nights
        ),
        *(
            f"{v / unit:+.2f}   {low / unit:+.2f} to {high / unit:+.2f}"
            for _, (_, v, (low, high)) in together
        ),
    ]
    places = [at for at, _ in (*nights, *together)]
    axes.set_yticks(places, left, fontsize=8)
    axes.tick_params(axis="y", length=0)
    other = axes.twinx()
    other.set_ylim(axes.get_ylim())
    other.set_yticks(places, [text.replace("-", "−") for text in right], fontsize=8)
    other.tick_params(axis="y", length=0)
    for one in (axes, other):
        for edge in ("left", "right", "top"):
            one.spines[edge].set_visible(False)


def _power(values: Sequence[float]) -> int:
    """Return the power of ten that numbers are told in; 0 where they are about 1."""
    largest = max(abs(value) for value in values)
    found = floor(log10(largest)) if largest > 0 else 0
    return found if not -2 < found < 3 else 0
