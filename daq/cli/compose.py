"""The command compose: what a plan will bring, as a table, a picture, and a description that pins it."""

from __future__ import annotations

import argparse
import os
import tomllib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any

from daq.cli.answer import Answer
from daq.cli.plan import refuse_hopeless, wishes
from daq.cli.toml import toml_text
from daq.errors import DescriptionError
from daq.itinerary import Forecast, Itinerary, forecast, pinned
from daq.itinerary.advice import cautions, orders_compared, remedies, verdict
from daq.itinerary.pilot import HOUR_S
from daq.service.bench_use import Used, changes, laid_in
from daq.service.load import DESCRIPTION, RIG, Loaded, load
from daq.storage.lab import there

MANY = 1000.0  # from here two digits of Q are enough


def compose(arguments: argparse.Namespace) -> Answer:
    """Compose the itinerary, print what it will bring, and write plan and picture where asked for."""
    used = _used(load(arguments.file, wishes(arguments)), arguments.bench)
    loaded = used.loaded
    itinerary = loaded.itinerary()
    expected = forecast(itinerary, loaded.measurement)
    refuse_hopeless(loaded, itinerary, expected, arguments.file)
    compared = orders_compared(loaded.measurement, loaded.rig, itinerary)
    advice = remedies(loaded.measurement, loaded.rig, itinerary, expected)
    if arguments.write is not None:
        _write(arguments.write, used, itinerary, arguments.file)
    if arguments.picture is not None:
        from daq.report.planned import draw_plan

        title = loaded.measurement.title or loaded.measurement.name
        draw_plan(arguments.picture, title, itinerary, expected, compared)
    figures = asdict(expected) | {
        "order": itinerary.order,
        "verdict": verdict(expected),
        "remedies": list(advice),
        "cautions": list(cautions(itinerary)),
        "notes": [*used.said, *itinerary.notes],
        "orders": {name: {"q": one.q, "kappa_se": one.kappa_se} for name, one in compared.items()},
    }
    return Answer(0, figures, [*used.said, *_lines(itinerary, expected, compared, advice, arguments)])


def _used(loaded: Loaded, lab: Path | None) -> Used:
    """Return a description as it is, or with the bench records of a lab laid in."""
    return Used(loaded, {}, ()) if lab is None else laid_in(loaded, there(lab))


def _write(path: Path, used: Used, itinerary: Itinerary, file: Path) -> None:
    """Write a description that holds every choice, for run and rehearse to take as it is."""
    loaded = used.loaded
    table = loaded.wishes.laid_over(tomllib.loads(loaded.texts[DESCRIPTION].decode()))
    rig_name = str(table["rig"])
    rig = os.path.relpath((file.parent / rig_name).resolve(), path.resolve().parent)
    table |= {"rig": Path(rig).as_posix(), "itinerary": pinned(itinerary, loaded.measurement)}
    notes = (f"Composed from {file.name}.", *used.said, *itinerary.notes)
    if used.said:
        table |= dict(changes(used, table))
        table["notes"] = {**table.get("notes", {}), "bench": list(used.said)}
    if used.at_mm:
        own = path.with_name(f"{path.stem}-rig.toml")
        _put(own, notes, _rig_table(used, (file.parent / rig_name).resolve(), path.resolve().parent))
        table["rig"] = own.name
    _put(path, notes, table)


def _rig_table(used: Used, rig: Path, beside: Path) -> dict[str, Any]:
    """Return the table of a rig whose openings stand where they were found, paths from its new folder."""
    table = tomllib.loads(used.loaded.texts[RIG].decode())
    for name, at_mm in used.at_mm.items():
        table["mask"]["openings"][name]["at_mm"] = at_mm
    for entry in table["devices"].values():
        if "dialect" in entry:
            away = os.path.relpath((rig.parent / str(entry["dialect"])).resolve(), beside)
            entry["dialect"] = Path(away).as_posix()
    return table


def _put(path: Path, notes: Iterable[str], table: Mapping[str, Any]) -> None:
    why = "".join(f"# {note}\n" for note in notes)
    try:
        path.write_text(f"{why}\n{toml_text(table)}")
    except OSError as error:
        raise DescriptionError((f"{path}: {(error.strerror or 'cannot be written').lower()}.",)) from error


def _lines(
    itinerary: Itinerary,
    expected: Forecast,
    compared: Mapping[str, Forecast],
    advice: tuple[str, ...],
    arguments: argparse.Namespace,
) -> Iterator[str]:
    yield f"{expected.visits} visits, {expected.laps} laps, {expected.pairs} pairs"
    yield (
        f"{expected.total_s / HOUR_S:.2f} h in all, {expected.live_s / HOUR_S:.2f} h live "
        f"(duty {100 * expected.duty:.1f} %)"
    )
    q = f"{expected.q:.2f}" if expected.q < MANY else f"{expected.q:.2g}"
    yield f"Q = {q}: this much longer than an ideal night without moves and drift"
    yield from itinerary.notes
    yield ""
    yield from _budget_lines(expected.budget)
    yield ""
    yield from _order_lines(compared, itinerary.order)
    yield ""
    yield verdict(expected)
    yield from cautions(itinerary)
    yield from advice
    for path in (arguments.write, arguments.picture):
        if path is not None:
            yield f"written: {path}"


_BUDGET_WORDS = {
    "counting": "counting",
    "background": "  of which background",
    "drift": "drift of the source",
    "lines": "lines of the source",
    "trend": "expected trend (a shift)",
    "dead time": "dead time (a shift)",
    "monitor": "monitor, if normalised to it",
}


def _budget_lines(budget: Mapping[str, float]) -> Iterator[str]:
    yield "standard errors of kappa"
    for name, se in budget.items():
        if se > 0:
            yield f"  {_BUDGET_WORDS[name]:<30} {se:.2e}"


def _order_lines(compared: Mapping[str, Forecast], own: str) -> Iterator[str]:
    yield f"{'order':<12} {'hours':>7} {'Q':>9} {'kappa_se':>10} {'goal after':>11}"
    for name, one in compared.items():
        met = "never" if one.goal_s is None else f"{one.goal_s / HOUR_S:.1f} h"
        mark = "*" if name == own else " "
        q = f"{one.q:.3f}" if one.q < 1000 else f"{one.q:.3g}"
        yield (
            f"{name + mark:<12} {one.total_s / HOUR_S:7.2f} {q:>9} {one.kappa_se:10.2e} "
            f"{met if one.goal_se else '':>11}"
        )
