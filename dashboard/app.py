"""The page's Dash application: one callback a second, and figures drawn in the browser."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import dash
from dash import ClientsideFunction, Input, Output, State
from flask_compress import Compress

from dashboard import access, lab
from dashboard.components import page
from dashboard.news import CURVES, WORDS, news

_OUTPUTS = {
    "page": Output("page", "className"),
    **{name: Output(name, "children") for name in WORDS},
    **{name: Output(name, "data") for name in (*CURVES, "seen")},
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
    _answer(app, folder, run)
    _draw(app)
    Compress(app.server)
    answered = {output for output, entry in app.callback_map.items() if "callback" in entry}
    access.guard(app.server, lambda name: name in lab.run_names(folder), answered, app.csp_hashes())
    return app


def _answer(app: dash.Dash, folder: Path, pinned: str | None) -> None:
    @app.callback(
        _OUTPUTS,
        Input("tick", "n_intervals"),
        Input("chosen", "data"),
        State("address", "pathname"),
        State("seen", "data"),
    )  # type: ignore[untyped-decorator]
    def refresh(_: int, chosen: Any, path: str | None, seen: dict[str, str] | None) -> dict[str, Any]:
        named = path.removeprefix("/runs/") if path and path.startswith("/runs/") else pinned
        fresh = news(folder, named, chosen, seen or {}, datetime.now(UTC))
        return {name: fresh.get(name, dash.no_update) for name in _OUTPUTS}


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
