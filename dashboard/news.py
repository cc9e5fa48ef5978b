"""What a browser has not seen yet: the page cut into parts, each sent only when it changed."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from functools import lru_cache
from pathlib import Path
from typing import Any

from dash.exceptions import PreventUpdate
from plotly.io.json import to_json_plotly

from daq.errors import StorageError
from daq.storage.people import NOBODY, Person
from dashboard import figures, lab
from dashboard.asking import book_stamp, requests_of
from dashboard.budget import budget_view
from dashboard.components import render
from dashboard.cuts import cuts_view
from dashboard.desk import desk_stamp, desk_view
from dashboard.operate import operate_view
from dashboard.times import clock
from dashboard.view import empty_view, is_silent, unreadable_view, view, waiting_view

WORDS = (
    *("header", "verdict", "line", "warnings", "kappa", "now"),
    *("sensors", "log", "rail", "runs", "footer", "operate", "who", "budget", "cuts", "desk"),
)
CURVES = ("night-data", "pattern-data", "plates-data", "strip-data")


def news(
    folder: Path,
    run: str | None,
    chosen: Any,
    seen: Mapping[str, str],
    now: datetime,
    person: Person = NOBODY,
) -> dict[str, Any]:
    """Return the parts of the page that a browser has not seen yet, with the new state of what it has seen.

    Parameters
    ----------
    folder
        The lab.
    run
        The run to show; None for the one written last.
    chosen
        Bit mask of the opening whose pattern is shown; the fullest for any other value.
    seen
        What the last answer to this browser said under "seen".
    now
        The wall clock, which alone tells silence.
    person
        Who asks: an operator is shown what to ask of the run.

    Raises
    ------
    PreventUpdate
        When nothing changed.
    """
    scene = _scene(folder, run, chosen, now, person)
    mark = _digest(repr(scene))
    if seen.get("mark") == mark:
        raise PreventUpdate
    told, digests = _parts(scene)
    fresh = {name: _drawn(name, told[name]) for name in told if seen.get(name) != digests[name]}
    return fresh | {"seen": digests | {"mark": mark}}


@dataclass(frozen=True, slots=True)
class _Scene:
    """All that the page depends on: two equal scenes look the same, whoever asks."""

    folder: Path
    names: tuple[str, ...]
    run: str | None
    person: Person
    stamp: str | None = None
    silent: bool = False
    chosen: int | None = None
    book: int = 0
    desk: str = ""


def _scene(folder: Path, run: str | None, chosen: Any, now: datetime, person: Person) -> _Scene:
    names, desk = tuple(lab.run_names(folder)), desk_stamp(folder, now)
    shown = run if run is not None else names[-1] if names else None
    if shown is None or shown not in names:
        return _Scene(folder, names, shown, person, book=book_stamp(folder), desk=desk)
    stamp = lab.stamp(folder, shown)
    mask = chosen if isinstance(chosen, int) else None
    try:
        silent = is_silent(lab.read(folder, shown, stamp), now)
    except StorageError:
        silent = False
    return _Scene(folder, names, shown, person, stamp, silent, mask, book_stamp(folder), desk)


@lru_cache(maxsize=32)
def _parts(scene: _Scene) -> tuple[dict[str, str], dict[str, str]]:
    """Return what the parts of the page tell, as JSON, and its digests; twenty pages of a run cost as one."""
    runs = [{"name": name, "shown": name == scene.run} for name in reversed(scene.names)]
    parts = _said(scene) | {
        "runs": runs,
        "desk": desk_view(scene.desk, scene.person, requests_of(scene.folder, "")),
    }
    told = {name: json.dumps(part) for name, part in parts.items()}
    return told, {name: _digest(text) for name, text in told.items()}


@lru_cache(maxsize=256)
def _drawn(name: str, told: str) -> Any:
    """Return a part of the page as plain data; one that tells the same again is not drawn again."""
    part = json.loads(told)
    return part if name in CURVES else json.loads(to_json_plotly(render(name, part)))


def _said(scene: _Scene) -> dict[str, Any]:
    if scene.run is None:
        return _bare(empty_view(scene.folder.name))
    if scene.stamp is None:
        return _bare(waiting_view(scene.run))
    try:
        feed = lab.read(scene.folder, scene.run, scene.stamp)
    except StorageError as error:
        return _bare(unreadable_view(scene.run, str(error)))
    return _whole(feed, scene)


def _whole(feed: dict[str, Any], scene: _Scene) -> dict[str, Any]:
    said = view(feed, scene.silent, scene.person)
    asks = operate_view(feed, scene.silent, scene.person, requests_of(scene.folder, str(scene.run)))
    masks = feed["openings"]
    chosen = max(masks) if scene.chosen is None or scene.chosen not in masks else scene.chosen
    return {
        "page": "whole",
        **said,
        "line": _line(said),
        "operate": asks,
        "budget": budget_view(feed),
        "cuts": cuts_view(feed),
        "who": {"says": asks["says"], "inside": bool(scene.person.name)},
        "footer": f"Data up to {clock(feed['updated_utc'], seconds=True)}.",
        "night-data": figures.night(feed),
        "pattern-data": figures.pattern(feed, chosen),
        "plates-data": figures.plates(feed),
        "strip-data": figures.strip(feed),
    }


def _bare(said: dict[str, Any]) -> dict[str, Any]:
    nothing = dict.fromkeys(("operate", "who", "budget", "cuts"))
    return {"page": "bare", **said, "line": _line(said), "footer": "", **nothing}


def _line(said: dict[str, Any]) -> dict[str, Any]:
    """Take the ticking line out of the verdict, which is announced whenever it changes."""
    verdict = said["verdict"]
    return {key: verdict.pop(key) for key in ("line", "ends_utc", "progress")}


def _digest(text: str) -> str:
    return hashlib.blake2b(text.encode(), digest_size=4).hexdigest()
