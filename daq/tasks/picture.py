"""Picture: data and fit of a task as one PNG that can be read in grey."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from textwrap import wrap

from matplotlib.axes import Axes
from matplotlib.figure import Figure

from daq.errors import StorageError
from daq.tasks.panels import Panel

WIDE = 115  # letters of a line of the title
INKS = ("#1b1b1b", "#b5490b", "#3f6ea8", "#7a7a7a", "#7b3f8c", "#2f7d4f")
MARKERS, LINES = ("o", "s", "^", "x", "D", "v"), ("-", "--", ":", "-.")


def draw_task(path: Path, title: str, panels: Sequence[Panel]) -> None:
    """Write the picture of what a task found."""
    rows = max(len(panels), 1)
    figure = Figure(figsize=(9.0, 1.0 + 3.2 * rows), layout="constrained")
    figure.suptitle("\n".join(wrap(title, WIDE)), fontsize=10)
    for axes, panel in zip(figure.subplots(rows, 1, squeeze=False)[:, 0], panels, strict=False):
        _panel(axes, panel)
    try:
        figure.savefig(path, dpi=120)
    except OSError as error:
        raise StorageError(
            "the picture cannot be written", where=str(path), remedy="Look at the disk"
        ) from error


def _panel(axes: Axes, panel: Panel) -> None:
    points = lines = 0
    inks: dict[str, str] = {}  # of what was measured, by its label: a line "label, fit" has the same
    for curve in panel.curves:
        if curve.line:
            ink = inks.get(curve.label.rpartition(",")[0], INKS[(lines + 1) % 4])
            axes.plot(curve.x, curve.y, LINES[lines % 4], color=ink, label=curve.label)
            lines += 1
            continue
        inks[curve.label] = INKS[points % 4]
        style = {"marker": MARKERS[points % 6], "color": INKS[points % 6], "markersize": 3.5, "linestyle": ""}
        axes.errorbar(curve.x, curve.y, curve.bars, label=curve.label, elinewidth=0.8, **style)  # type: ignore[arg-type]
        points += 1
    high = axes.get_ylim()[1]
    for name, place in panel.marks.items():
        axes.axvline(place, color=INKS[3], linewidth=0.8, linestyle=":")
        axes.annotate(name, (place, high), rotation=90, fontsize=7, ha="right", va="top")
    if panel.names:
        axes.set_xticks(range(len(panel.names)), panel.names)
    axes.set(title=panel.title, xlabel=panel.x_label, ylabel=panel.y_label)
    if panel.log_x:
        axes.set_xscale("log")
    if len(panel.curves) > 1:
        axes.legend(fontsize=8)
