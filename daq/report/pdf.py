"""PDF: the morning report on paper, made without a browser."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from textwrap import wrap
from typing import Any

from matplotlib.backends.backend_pdf import PdfPages
from matplotlib.figure import Figure

from daq.report.document import FOOTER, Block, Document
from daq.report.night_plot import draw_night

A4 = (8.27, 11.69)
LEFT, RIGHT, TOP, BOTTOM = 0.06, 0.94, 0.965, 0.035
SIZE, LEADING = 6.4, 0.0103
COLUMN, WHOLE = 66, 135  # characters of a line
PICTURE = 0.34  # of the page's height


def write_pdf(path: Path, found: Document, facts: Mapping[str, Any]) -> None:
    """Write a report as PDF: one page, then the appendix."""
    with PdfPages(path, metadata={"Title": found.title, "CreationDate": None}) as pages:
        pages.savefig(_first(found, facts))
        lines = [line for block in found.appendix for line in (*_lines(block, WHOLE), ("", False))]
        per_page = int((TOP - BOTTOM) / LEADING)
        for start in range(0, len(lines), per_page):
            page = Figure(figsize=A4)
            _write(page, lines[start : start + per_page], LEFT, TOP)
            pages.savefig(page)


Line = tuple[str, bool]  # text, and whether it is a heading


def _first(found: Document, facts: Mapping[str, Any]) -> Figure:
    page = Figure(figsize=A4)
    page.text(LEFT, TOP, found.title, fontsize=12, fontweight="bold", va="top")
    page.text(LEFT, TOP - 0.02, "; ".join(found.head), fontsize=SIZE + 0.6, va="top")
    verdict = f"Proposed: this night {found.verdict}" if found.verdict else ""
    box = {"facecolor": "white", "edgecolor": "black", "pad": 3}
    page.text(LEFT + 0.005, TOP - 0.048, verdict, fontsize=10, fontweight="bold", va="top", bbox=box)
    reasons: list[Line] = [(line, False) for reason in found.reasons for line in wrap(reason, WHOLE)]
    at = _write(page, reasons, LEFT, TOP - 0.072) - 0.004
    for number, line in enumerate(found.residual):
        page.text(
            LEFT,
            at,
            line,
            fontsize=10 if number == 0 else SIZE + 1,
            va="top",
            fontweight="bold" if number == 0 else None,
        )
        at -= 0.019 if number == 0 else 0.0125
    parts = page.subfigures(3, 1, height_ratios=(1 - at, PICTURE, at - PICTURE), squeeze=False)
    draw_night(parts[1, 0], facts)
    _two_columns(page, found.page, at - PICTURE - 0.008)
    page.text(LEFT, BOTTOM + 0.013, found.signature, fontsize=SIZE + 1, va="bottom")
    page.text(LEFT, BOTTOM - 0.005, FOOTER, fontsize=SIZE - 1, va="bottom", color="#444444")
    return page


def _two_columns(page: Figure, blocks: Sequence[Block], top: float) -> None:
    """Write blocks side by side, as many lines as fit; what does not is said to stand in the HTML."""
    most = int((top - BOTTOM - 0.035) / LEADING)
    columns: list[list[Line]] = [[], []]
    for block in blocks:
        target = min(columns, key=len)
        target += [*_lines(block, COLUMN), ("", False)]
    for lines, left in zip(columns, (LEFT, 0.51), strict=True):
        kept = lines if len(lines) <= most else [*lines[: most - 1], ("... more in the HTML report", False)]
        _write(page, kept, left, top)


def _write(page: Figure, lines: Sequence[Line], left: float, top: float) -> float:
    """Write lines from the top down and return where the next one would stand."""
    at = top
    for text, heading in lines:
        style = {"fontweight": "bold"} if heading else {"family": "DejaVu Sans Mono"}
        page.text(left, at, text, fontsize=SIZE + 0.8 if heading else SIZE - 0.7, va="top", **style)  # type: ignore[arg-type]
        at -= LEADING
    return at


def _lines(block: Block, width: int) -> Iterator[Line]:
    yield block.title, True
    for line in block.lines:
        yield from ((part, False) for part in wrap(line, width))
    if len(block.rows) < 2:
        return
    widths = _widths(block.rows, width)
    for row in block.rows:
        cells = [wrap(cell, size) or [""] for cell, size in zip(row, widths, strict=True)]
        for number in range(max(map(len, cells))):
            parts = [
                (cell[number] if number < len(cell) else "").ljust(size)
                for cell, size in zip(cells, widths, strict=True)
            ]
            yield "  ".join(parts).rstrip(), False


def _widths(rows: Sequence[tuple[str, ...]], width: int) -> list[int]:
    """Return how wide each column may be: as its longest cell, the widest giving way to the others."""
    widths = [max(map(len, column)) or 1 for column in zip(*rows, strict=True)]
    while sum(widths) + 2 * (len(widths) - 1) > width:
        widest = widths.index(max(widths))
        widths[widest] -= 1
    return widths
