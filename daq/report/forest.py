"""The forest of a pool: every night with its bar, and below them all nights together."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

from matplotlib.figure import Figure
from scipy.special import stdtrit

from daq.errors import DescriptionError
from daq.report.planned import ACCENT, FORMATS, INK, LIGHT

ODD = 0.05
LABELLED = 60  # nights that still have room for their names


def draw_forest(
    path: Path,
    names: Sequence[str],
    nights: Sequence[tuple[float, float, float, float]],
    together: Sequence[tuple[str, float, tuple[float, float]]],
    zero: bool = True,
) -> None:
    """Write the picture; the ending of the path says in which format.

    Parameters
    ----------
    nights
        By night: kappa, standard error, degrees of freedom, and the p of lying so far from the others.
    together
        Name, value and 95 % interval of every way to take the nights together; the first is the headline.
    zero
        Whether zero is drawn: not while kappa is hidden.

    Raises
    ------
    DescriptionError
        For another ending, or a place that cannot be written to.
    """
    if path.suffix not in FORMATS:
        raise DescriptionError((f"{path}: a picture ends in {', '.join(FORMATS)}. Give it such a name.",))
    rows = len(nights) + len(together) + 1
    figure = Figure(figsize=(8.0, min(2.0 + 0.22 * rows, 40.0)), layout="constrained")
    axes = figure.subplots()
    if zero:
        axes.axvline(0.0, color=LIGHT, linewidth=1.0)
    for at, (kappa, se, dof, p) in enumerate(nights):
        half, colour = float(stdtrit(dof, 0.975)) * se, ACCENT if p < ODD else INK
        axes.plot([kappa - half, kappa + half], [at, at], color=colour, linewidth=0.9)
        axes.plot([kappa], [at], "s", color=colour, markersize=3.0)
    for at, (_, value, ends) in enumerate(together, start=len(nights) + 1):
        axes.fill(
            [ends[0], value, ends[1], value],
            [at, at - 0.35, at, at + 0.35],
            color=INK if at == len(nights) + 1 else LIGHT,
        )
    labels = [
        *(names if len(names) <= LABELLED else [""] * len(names)),
        "",
        *(name for name, _, _ in together),
    ]
    axes.set_yticks(range(rows), labels, fontsize=7)
    axes.set_ylim(rows - 0.5, -0.5)
    axes.ticklabel_format(axis="x", style="sci", scilimits=(0, 0))
    axes.set(xlabel="kappa, 95 % intervals" if zero else "kappa + hidden offset, 95 % intervals")
    try:
        figure.savefig(path, metadata={"Date": None} if path.suffix == ".svg" else None)
    except OSError as error:
        raise DescriptionError((f"{path}: {(error.strerror or 'cannot be written').lower()}.",)) from error
