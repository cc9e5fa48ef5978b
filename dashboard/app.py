"""The page's Dash application: one callback a second, and figures drawn in the browser."""

from __future__ import annotations

from collections.abc import Collection
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import dash
from dash import ClientsideFunction, Input, Output, State
from flask import g
from flask_compress import Compress

from daq.storage.people import people
from daq.storage.sessions import person_of
from dashboard import access, lab
from dashboard.asking import leave
from dashboard.components import page
from dashboard.login import CSRF, Limiter, add_login
from dashboard.metrics import add_metrics
from dashboard.news import CURVES, WORDS, news

_OUTPUTS = {
    "page": Output("page", "className"),
    **{name: Output(name, "children") for name in WORDS},
    **{name: Output(name, "data") for name in (*CURVES, "seen")},
}
_INDEX = (Path(__file__).parent / "index.html").read_text(encoding="utf-8")


def build(
    folder: Path, run: str | None = None, names: Collection[str] | None = None, closed: bool = False
) -> dash.Dash:
    """Return the application for a lab, gated and compressed.

    Parameters
    ----------
    folder
        The lab.
    run
        The run that is shown, whatever is newer.
    names
        Names by which the page may be called from elsewhere; None at this computer alone.
    closed
        Whether people have to log in even while the lab knows nobody.
    """
    app = dash.Dash(
        __name__,
        index_string=_INDEX,
        title="tercet",
        update_title=None,
        serve_locally=True,
        add_log_handler=False,
        csrf_token_name=CSRF,
        csrf_header_name="X-CSRFToken",
    )
    app.layout = page()
    roles = _answering(app, folder, run)
    _draw(app)
    add_login(app.server, folder, Limiter())
    add_metrics(app.server, folder)
    Compress(app.server)
    door = access.Door(
        person=lambda token: person_of(folder, token),
        is_closed=lambda: closed or bool(people(folder)),
        is_run=lambda name: name in lab.run_names(folder),
        roles=roles,
        names=names,
    )
    door.check([output for output, entry in app.callback_map.items() if "callback" in entry])
    access.guard(app.server, door, app.csp_hashes())
    return app


def _answering(app: dash.Dash, folder: Path, pinned: str | None) -> dict[str, str]:
    """Register what the server answers, and return the least role for each output."""
    roles: dict[str, str] = {}
    for role, register in (("watcher", _answer), ("operator", _ask)):
        before = set(app.callback_map)
        register(app, folder, pinned)
        roles |= dict.fromkeys(set(app.callback_map) - before, role)
    return roles


def _answer(app: dash.Dash, folder: Path, pinned: str | None) -> None:
    @app.callback(
        _OUTPUTS,
        Input("tick", "n_intervals"),
        Input("chosen", "data"),
        State("address", "pathname"),
        State("seen", "data"),
    )  # type: ignore[untyped-decorator]
    def refresh(_: int, chosen: Any, path: str | None, seen: dict[str, str] | None) -> dict[str, Any]:
        fresh = news(folder, _named(path, pinned), chosen, seen or {}, datetime.now(UTC), g.person)
        return {name: fresh.get(name, dash.no_update) for name in _OUTPUTS}


def _ask(app: dash.Dash, folder: Path, _: str | None) -> None:
    @app.callback(Output("asked-says", "children"), Input("asked", "data"), prevent_initial_call=True)  # type: ignore[untyped-decorator]
    def ask(asked: Any) -> str:
        return leave(folder, asked, g.person)


def _named(path: str | None, pinned: str | None) -> str | None:
    return path.removeprefix("/runs/") if path and path.startswith("/runs/") else pinned


def _draw(app: dash.Dash) -> None:
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
