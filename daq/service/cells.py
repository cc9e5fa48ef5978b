"""Cells: a table of visits from elsewhere in our words and units, or all of it that cannot be read."""

from __future__ import annotations

import csv
import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq import openings
from daq.description import ForeignTable
from daq.errors import DescriptionError
from daq.itinerary.tabled import laps_of
from daq.service.files import read_file
from daq.service.load import Loaded

MOST_PROBLEMS = 10
FIRST_NS = 1_000_000_000  # run time of the first gate: a replay needs a moment before it


@dataclass(frozen=True, slots=True)
class ForeignVisits:
    """The columns of a foreign table in our words and units, row by row."""

    opening: NDArray[np.int64]
    position_mm: NDArray[np.float64]
    live_s: NDArray[np.float64]
    dwell_s: NDArray[np.float64]
    open_ns: NDArray[np.int64]
    attempt: NDArray[np.int64]
    lap: NDArray[np.int64]
    values: NDArray[np.float64]


def read_visits(path: Path, foreign: ForeignTable, loaded: Loaded) -> ForeignVisits:
    """Return the columns of a table."""
    rows = _rows(path, foreign.delimiter)
    heads = foreign.columns.heads()
    head = rows[0] if rows else []
    lacking = [
        f"{path}: there is no column {name!r} ({ours})." for ours, name in heads.items() if name not in head
    ]
    if lacking or len(rows) < 2:
        known = f" Its columns are: {', '.join(head) or 'none'}."
        raise DescriptionError(tuple(one + known for one in lacking) or (f"{path}: it holds no visit.",))
    reader = _Cells(path, foreign, {ours: head.index(name) for ours, name in heads.items()}, rows[1:])
    have = set(loaded.rig.opening_masks)
    words = {openings.name(mask): mask for mask in have} | {str(mask): mask for mask in have}
    counted = loaded.measurement.estimate.counting == "counts"
    opening = reader.column(
        "opening", lambda cell: words[foreign.openings.get(cell, cell)], "no opening of the rig"
    )
    live_s = np.round(reader.numbers("live_s", least=0.0), 9)
    values = [reader.numbers(name, least=0.0, whole=counted) for name in heads if name.startswith("values.")]
    attempt = reader.numbers("attempt", least=1, whole=True) if "attempt" in heads else np.ones(len(live_s))
    dwell_s = reader.numbers("dwell_s", least=0.0) if "dwell_s" in heads else live_s
    open_s = reader.numbers("gate_open_s") if "gate_open_s" in heads else np.cumsum(live_s) - live_s
    place, lap = reader.numbers("position_mm"), reader.numbers("lap", whole=True) if "lap" in heads else None
    reader.refuse(open_s)
    masks, tries = np.array(opening, np.int64), attempt.astype(np.int64)
    laps = laps_of(masks, place, tries) if lap is None else (lap - lap.min()).astype(np.int64)
    open_ns = FIRST_NS + np.round((open_s - open_s[0]) * 1e9).astype(np.int64)
    return ForeignVisits(masks, place, live_s, dwell_s, open_ns, tries, laps, np.stack(values, axis=1))


class _Cells:
    """The cells of a table; what cannot be read is gathered, with line and column."""

    def __init__(
        self, path: Path, foreign: ForeignTable, places: Mapping[str, int], rows: Sequence[Sequence[str]]
    ) -> None:
        self._path, self._foreign, self._places, self._rows = path, foreign, places, rows
        self._problems: list[str] = []

    def column(self, name: str, read: Callable[[str], Any], wrong: str) -> list[Any]:
        """Return a column, each cell read; None where it cannot be."""
        return [self._cell(line, row, name, read, wrong) for line, row in enumerate(self._rows, 2)]

    def numbers(self, name: str, least: float = -math.inf, whole: bool = False) -> NDArray[np.float64]:
        """Return a column of numbers in our unit."""
        factor = self._foreign.factors.get(name.partition(".")[0], 1.0)

        def read(cell: str) -> float:
            number = float(cell) * factor
            if not math.isfinite(number) or number < least or (whole and number != round(number)):
                raise ValueError
            return number

        wrong = "not a whole number" if whole else "not a number"
        wrong += "" if least == -math.inf else f" of {least:g} or more"
        return np.array([math.nan if one is None else one for one in self.column(name, read, wrong)])

    def refuse(self, open_s: NDArray[np.float64]) -> None:
        """Refuse the table when any of its cells could not be read, or time goes back in it."""
        back = np.flatnonzero(np.diff(open_s) < 0)
        if back.size and not self._problems:
            self._problems.append(
                f"{self._path}, line {back[0] + 3}: its gate opened before that of the line above."
            )
        if self._problems:
            more = len(self._problems) - MOST_PROBLEMS
            shown = self._problems[:MOST_PROBLEMS] + ([f"{self._path}: and {more} more."] if more > 0 else [])
            raise DescriptionError(tuple(shown))

    def _cell(self, line: int, row: Sequence[str], name: str, read: Callable[[str], Any], wrong: str) -> Any:
        cell = row[self._places[name]].strip() if self._places[name] < len(row) else ""
        try:
            return read(cell)
        except (ValueError, KeyError):
            head = self._foreign.columns.heads()[name]
            self._problems.append(f"{self._path}, line {line}, column {head!r}: {cell!r} is {wrong}.")
            return None


def _rows(path: Path, delimiter: str) -> list[list[str]]:
    text = read_file(path)
    try:
        lines = text.decode("utf-8-sig").splitlines()
    except UnicodeDecodeError as error:
        raise DescriptionError(
            (f"{path}: it is not UTF-8 text ({error.reason}). Save it as UTF-8.",)
        ) from error
    return [row for row in csv.reader(lines, delimiter=delimiter) if any(cell.strip() for cell in row)]
