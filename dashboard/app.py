"""The page's Dash application: one callback a second that sends only what changed."""

from __future__ import annotations

import hashlib
import json
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import dash
from dash import ClientsideFunction, Input, Output, State
from dash.exceptions import PreventUpdate
from flask_compress import Compress

from daq.errors import StorageError
from dashboard import access, figures, lab
from dashboard.components import page, render
from dashboard.view import empty_view, is_silent, unreadable_view, view, waiting_view
from dashboard.words import clock

_CHILDREN = (
    "header",
    "verdict",
    "line",
    "warnings",
    "kappa",
    "rail",
    "now",
    "sensors",
    "log",
    "runs",
    "footer",
)
_DATA = ("night-data", "pattern-data", "plates-data", "strip-data")
_OUTPUTS = {
    "page": Output("page", "className"),
    **{name: Output(name, "children") for name in _CHILDREN},
    **{name: Output(name, "data") for name in _DATA},
    "seen": Output("seen", "data"),
}
_INDEX = (Path(__file__).parent / "index.html").read_text(encoding="utf-8")


def build(folder: Path, run: str | None = None) -> dash.Dash:
    """Return the application for a lab, gated and compressed; `run` pins it to one run."""
    app = dash.Dash(
        __name__,
        index_string=_INDEX,
        title="tercet",
        update_title=None,
        serve_locally=True,
        add_log_handler=False,
    )
    app.layout = page()
    _register(app, folder, run)
    Compress(app.server)
    answered = {output for output, entry in app.callback_map.items() if "callback" in entry}
    access.guard(app.server, lambda name: name in lab.run_names(folder), answered, app.csp_hashes())
    return app


def news(
    folder: Path, run: str | None, chosen: int | None, seen: dict[str, str], now: datetime
) -> dict[str, Any]:
    """Return the parts of the page that a browser has not seen yet, with the new state of what it has seen.

    Raises
    ------
    PreventUpdate
        When nothing changed.
    """
    names = lab.run_names(folder)
    shown = run if run is not None else names[-1] if names else None
    feed, mark = _feed(folder, shown, now, names, chosen)
    if seen.get("mark") == mark:
        raise PreventUpdate
    parts = _parts(folder, shown, feed, now, chosen) | {"runs": _runs(names, shown)}
    digests = {name: _digest(part) for name, part in parts.items()}
    fresh = {name: part for name, part in parts.items() if seen.get(name) != digests[name]}
    return {name: render(name, part) for name, part in fresh.items()} | {"seen": digests | {"mark": mark}}


def _register(app: dash.Dash, folder: Path, pinned: str | None) -> None:
    @app.callback(
        _OUTPUTS,
        Input("tick", "n_intervals"),
        Input("chosen", "data"),
        State("address", "pathname"),
        State("seen", "data"),
    )  # type: ignore[untyped-decorator]
    def refresh(_: int, chosen: int | None, path: str | None, seen: dict[str, str] | None) -> dict[str, Any]:
        named = path.removeprefix("/runs/") if path and path.startswith("/runs/") else pinned
        fresh = news(folder, named, chosen, seen or {}, datetime.now(UTC))
        return {name: fresh.get(name, dash.no_update) for name in _OUTPUTS}

    for name in ("night", "pattern", "strip"):
        app.clientside_callback(
            ClientsideFunction("tercet", name),
            Output(name, "figure"),
            Output(f"{name}-image", "aria-label"),
            Output(f"{name}-caption", "children"),
            Output(f"{name}-image", "className"),
            Input(f"{name}-data", "data"),
            Input("look", "data"),
        )
    app.clientside_callback(
        ClientsideFunction("tercet", "mark"),
        Output("marked", "data"),
        Input("plates-data", "data"),
        Input("now", "children"),
        Input("rail", "children"),
        Input("pattern-data", "data"),
    )


def _feed(
    folder: Path, run: str | None, now: datetime, names: list[str], chosen: int | None
) -> tuple[dict[str, Any] | StorageError | None, str]:
    """Return the feed (or why there is none) and a mark that changes whenever the page would."""
    if run is None or run not in names:
        return None, f"none {run}"
    stamp = lab.stamp(folder, run)
    try:
        feed = lab.read(folder, run, stamp)
    except StorageError as error:
        return error, f"{stamp} unreadable"
    return feed, f"{stamp} {is_silent(feed, now)} {chosen} {len(names)}"


def _parts(
    folder: Path,
    run: str | None,
    feed: dict[str, Any] | StorageError | None,
    now: datetime,
    chosen: int | None,
) -> dict[str, Any]:
    if feed is None:
        return _bare(empty_view(folder.name) if run is None else waiting_view(run))
    if isinstance(feed, StorageError):
        return _bare(unreadable_view(str(run), str(feed)))
    said = view(feed, is_silent(feed, now))
    shown = chosen if chosen is not None and chosen in feed["openings"] else max(feed["openings"])
    return {
        "page": "whole",
        **said,
        "line": _line(said),
        "footer": f"Data up to {clock(feed['updated_utc'], seconds=True)}.",
        "night-data": figures.night(feed),
        "pattern-data": figures.pattern(feed, shown),
        "plates-data": figures.plates(feed),
        "strip-data": figures.strip(feed),
    }


def _bare(said: dict[str, Any]) -> dict[str, Any]:
    return {"page": "bare", **said, "line": _line(said), "footer": ""}


def _line(said: dict[str, Any]) -> dict[str, Any]:
    """Take the ticking line out of the verdict, which is announced whenever it changes."""
    verdict = said["verdict"]
    return {key: verdict.pop(key) for key in ("line", "ends_utc", "progress")}


def _runs(names: list[str], shown: str | None) -> list[dict[str, Any]]:
    return [{"name": name, "shown": name == shown} for name in reversed(names)]


def _digest(part: Any) -> str:
    return hashlib.blake2b(json.dumps(part).encode(), digest_size=4).hexdigest()
