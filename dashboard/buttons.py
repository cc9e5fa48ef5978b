"""An operator's buttons as Dash components, and the question before anything is asked of a run."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

from dash import html

Part = Mapping[str, Any]
Children = list[Any]


def question() -> html.Dialog:
    """Return the question before anything is asked of a run; the browser fills it in."""
    return html.Dialog(
        [
            html.H2(id="confirm-title"),
            html.P(id="confirm-will"),
            html.Div(
                [
                    html.Button("Do nothing", id="confirm-no", type="button"),
                    html.Button(id="confirm-yes", type="button"),
                ],
                className="buttons",
            ),
        ],
        id="confirm",
        **{"aria-labelledby": "confirm-title", "aria-describedby": "confirm-will"},
    )


def operate(part: Part | None) -> Children:
    """Return what may be asked of the run, and what was asked before."""
    if part is None or not (part["acts"] or part["asked"]):
        return []
    asked = [html.Ol([html.Li(line) for line in part["asked"]], className="soft")] if part["asked"] else []
    acts = [html.Div([act_button(act) for act in part["acts"]], className="buttons")] if part["acts"] else []
    return [html.H2("Ask of the run"), *acts, *asked]


def act_button(act: Part) -> html.Button:
    """Return a button that first says what will happen."""
    told = {f"data-{key}": act[key] for key in ("what", "about", "run", "will")}
    return html.Button(act["label"], type="button", className="act", **told)


def who(part: Part | None) -> Children:
    """Return who looks, and the way out for whoever logged in."""
    if part is None:
        return []
    leave = [html.Button("Log out", id="log-out", type="button")] if part["inside"] else []
    return [html.Span(part["says"]), *leave]


def desk(part: Part | None) -> Children:
    """Return what is booked in the lab, and for an operator a form that books once more."""
    if part is None:
        return []
    says = [html.P(part["says"])] if part["says"] else []
    started = html.Ul([html.Li(line) for line in part["starts"]])
    starts = [html.Details([html.Summary("Earlier starts"), started])] if part["starts"] else []
    asked = [html.Ul([html.Li(line) for line in part["asked"]], className="soft")] if part["asked"] else []
    form = [_form(part["form"])] if part["form"] else []
    booked = html.Ul([_booked(line) for line in part["lines"]])
    return [html.H2("Booked"), *says, booked, *form, *asked, *starts]


def _booked(line: Part) -> html.Li:
    cancel = [html.Div(act_button(line["cancel"]), className="buttons")] if line["cancel"] else []
    return html.Li([html.P(line["says"]), html.P(line["ready"], className="soft"), *cancel])


def _form(form: Part) -> html.Details:
    """Return the place of a form; the browser fills it, and gathers what is in it."""
    told = {"data-files": json.dumps(form["files"]), "data-will": form["will"]}
    return html.Details([html.Summary("Book once more"), html.Div(id="booking-fields")], id="booking", **told)
